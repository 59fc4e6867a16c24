import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'
const name = 'VARCHAR(64) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  await sequelize.query(`CREATE TABLE IF NOT EXISTS server_processes (
    id ${id} NOT NULL PRIMARY KEY,
    host VARCHAR(200) NOT NULL,
    address VARCHAR(200) NULL,
    expires_at DATETIME(3) NOT NULL,
    KEY server_processes_expiry (expires_at)
  )`)
  // Texts, not JSON: the connector would parse JSON columns, and what decides served bits must come back as it went in.
  await sequelize.query(`CREATE TABLE IF NOT EXISTS adaptations (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    model ${name} NOT NULL,
    version INT UNSIGNED NOT NULL,
    loss ${name} NULL,
    loss_version INT UNSIGNED NULL,
    robot VARCHAR(120) NOT NULL,
    context TEXT NOT NULL,
    settings TEXT NOT NULL,
    arm MEDIUMTEXT NOT NULL,
    state ENUM('adapting', 'frozen', 'ended') NOT NULL,
    frozen_reason VARCHAR(1000) NULL,
    frozen_at DATETIME(3) NULL,
    frozen_by VARCHAR(160) NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    ended_at DATETIME(3) NULL,
    lease_holder ${id} NULL,
    lease_epoch BIGINT UNSIGNED NOT NULL DEFAULT 0,
    KEY adaptations_team (team_id, id),
    KEY adaptations_holder (lease_holder),
    CONSTRAINT adaptations_team FOREIGN KEY (team_id) REFERENCES teams (id)
  )`)
  // What was measured is kept as the binary64 numbers it was read as: replaying them gives the same bits.
  await sequelize.query(`CREATE TABLE IF NOT EXISTS adaptation_log (
    adaptation_id ${id} NOT NULL,
    position BIGINT UNSIGNED NOT NULL,
    entry ENUM('batch', 'event', 'command') NOT NULL,
    sequence BIGINT UNSIGNED NULL,
    revision BIGINT UNSIGNED NOT NULL,
    verdict ENUM('accepted', 'rejected', 'stored') NULL,
    at DATETIME(3) NOT NULL,
    detail TEXT NOT NULL,
    content MEDIUMBLOB NULL,
    answer MEDIUMTEXT NOT NULL,
    next_sequence BIGINT UNSIGNED NOT NULL,
    as_of DOUBLE NULL,
    rejections INT UNSIGNED NOT NULL,
    PRIMARY KEY (adaptation_id, position),
    UNIQUE KEY adaptation_log_sequence (adaptation_id, sequence)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS adaptation_checkpoints (
    adaptation_id ${id} NOT NULL,
    position BIGINT UNSIGNED NOT NULL,
    bytes LONGBLOB NOT NULL,
    PRIMARY KEY (adaptation_id, position)
  )`)
}
