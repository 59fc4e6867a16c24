import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'
const name = 'VARCHAR(64) CHARACTER SET ascii COLLATE ascii_bin'
const hash = 'CHAR(64) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  await sequelize.query(`CREATE TABLE IF NOT EXISTS arms (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    name ${name} NOT NULL,
    description VARCHAR(2000) NOT NULL,
    joints JSON NOT NULL,
    joints_fingerprint CHAR(12) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    gravity JSON NOT NULL,
    torque JSON NOT NULL,
    fallback VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    horizon DOUBLE NOT NULL,
    firmware VARCHAR(120) NULL,
    archived_at DATETIME(3) NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY arms_name (team_id, name),
    CONSTRAINT arms_team FOREIGN KEY (team_id) REFERENCES teams (id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS recordings (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    arm_id ${id} NOT NULL,
    name VARCHAR(200) NOT NULL,
    \`use\` ENUM('fit', 'meta_train', 'validate', 'evaluate') NOT NULL,
    context JSON NOT NULL,
    row_count INT UNSIGNED NOT NULL,
    duration DOUBLE NOT NULL,
    rate DOUBLE NOT NULL,
    bytes BIGINT UNSIGNED NOT NULL,
    checksum ${hash} NOT NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    UNIQUE KEY recordings_content (arm_id, checksum),
    KEY recordings_team (team_id, id),
    CONSTRAINT recordings_team FOREIGN KEY (team_id) REFERENCES teams (id),
    CONSTRAINT recordings_arm FOREIGN KEY (arm_id) REFERENCES arms (id)
  )`)
  // Chunks are written while the upload runs, before the recording exists; recording_uploads says which those are, so
  // that what a broken upload leaves behind can be told from what belongs to a recording.
  await sequelize.query(`CREATE TABLE IF NOT EXISTS recording_chunks (
    recording_id ${id} NOT NULL,
    position INT UNSIGNED NOT NULL,
    content MEDIUMBLOB NOT NULL,
    PRIMARY KEY (recording_id, position)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS recording_uploads (
    recording_id ${id} NOT NULL PRIMARY KEY,
    touched_at DATETIME(3) NOT NULL
  )`)
}
