import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'
const name = 'VARCHAR(64) CHARACTER SET ascii COLLATE ascii_bin'
const hash = 'CHAR(64) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  await sequelize.query(`CREATE TABLE IF NOT EXISTS models (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    arm_id ${id} NOT NULL,
    name ${name} NOT NULL,
    description VARCHAR(2000) NOT NULL,
    live_version INT UNSIGNED NULL,
    live_since DATETIME(3) NULL,
    release_count INT UNSIGNED NOT NULL DEFAULT 0,
    newest_version INT UNSIGNED NULL,
    archived_at DATETIME(3) NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY models_name (team_id, name),
    CONSTRAINT models_team FOREIGN KEY (team_id) REFERENCES teams (id),
    CONSTRAINT models_arm FOREIGN KEY (arm_id) REFERENCES arms (id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS versions (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    model_id ${id} NOT NULL,
    number INT UNSIGNED NOT NULL,
    origin JSON NOT NULL,
    network JSON NOT NULL,
    artefact MEDIUMBLOB NOT NULL,
    checksum ${hash} NOT NULL,
    metrics JSON NULL,
    recommended JSON NOT NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY versions_number (model_id, number),
    KEY versions_checksum (model_id, checksum),
    CONSTRAINT versions_model FOREIGN KEY (model_id) REFERENCES models (id)
  )`)
  // The unique key is what decides when two people release at the same moment.
  await sequelize.query(`CREATE TABLE IF NOT EXISTS releases (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    model_id ${id} NOT NULL,
    number INT UNSIGNED NOT NULL,
    kind ENUM('release', 'rollback') NOT NULL,
    version INT UNSIGNED NOT NULL,
    previous_version INT UNSIGNED NULL,
    reason VARCHAR(500) NOT NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY releases_number (model_id, number),
    KEY releases_version (model_id, version),
    CONSTRAINT releases_version_number FOREIGN KEY (model_id, version) REFERENCES versions (model_id, number)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS losses (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    model_id ${id} NOT NULL,
    name ${name} NOT NULL,
    kind VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    description VARCHAR(2000) NOT NULL,
    newest_version INT UNSIGNED NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY losses_name (team_id, name),
    CONSTRAINT losses_team FOREIGN KEY (team_id) REFERENCES teams (id),
    CONSTRAINT losses_model FOREIGN KEY (model_id) REFERENCES models (id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS loss_versions (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    loss_id ${id} NOT NULL,
    number INT UNSIGNED NOT NULL,
    base_version_id ${id} NOT NULL,
    base_version INT UNSIGNED NOT NULL,
    base_checksum ${hash} NOT NULL,
    scheme VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    update_settings JSON NOT NULL,
    artefact MEDIUMBLOB NOT NULL,
    checksum ${hash} NOT NULL,
    origin JSON NOT NULL,
    validation JSON NOT NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY loss_versions_number (loss_id, number),
    CONSTRAINT loss_versions_loss FOREIGN KEY (loss_id) REFERENCES losses (id),
    CONSTRAINT loss_versions_base FOREIGN KEY (base_version_id) REFERENCES versions (id)
  )`)
}
