import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'
const hash = 'CHAR(64) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  // No foreign keys: the record of what happened outlives what it happened to.
  await sequelize.query(`CREATE TABLE IF NOT EXISTS audit_events (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NULL,
    at DATETIME(3) NOT NULL,
    actor_kind ENUM('person', 'key', 'system') NOT NULL,
    actor_id ${id} NULL,
    actor_name VARCHAR(160) NOT NULL,
    action VARCHAR(60) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    subject_kind VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    subject_id VARCHAR(64) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    subject_name VARCHAR(200) NOT NULL,
    state_before JSON NULL,
    state_after JSON NULL,
    reason VARCHAR(500) NULL,
    request_id VARCHAR(64) CHARACTER SET ascii COLLATE ascii_bin NULL,
    KEY audit_events_team (team_id, id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS changes (
    id BIGINT UNSIGNED NOT NULL AUTO_INCREMENT PRIMARY KEY,
    origin ${id} NOT NULL,
    kind VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    team_id ${id} NULL,
    subject VARCHAR(200) NOT NULL,
    at DATETIME(3) NOT NULL,
    KEY changes_at (at)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS idempotency_answers (
    scope_hash ${hash} NOT NULL PRIMARY KEY,
    body_hash ${hash} NOT NULL,
    claim ${id} NOT NULL,
    state ENUM('running', 'answered', 'not_kept') NOT NULL,
    status SMALLINT UNSIGNED NULL,
    headers TEXT NULL,
    body MEDIUMTEXT NULL,
    started_at DATETIME(3) NOT NULL,
    KEY idempotency_answers_started (started_at)
  )`)
}
