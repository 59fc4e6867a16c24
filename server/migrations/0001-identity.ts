import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'
const hash = 'CHAR(64) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  await sequelize.query(`CREATE TABLE IF NOT EXISTS teams (
    id ${id} NOT NULL PRIMARY KEY,
    name VARCHAR(120) NOT NULL,
    simulated BOOLEAN NOT NULL DEFAULT FALSE,
    created_at DATETIME(3) NOT NULL,
    UNIQUE KEY teams_name (name)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS people (
    id ${id} NOT NULL PRIMARY KEY,
    email VARCHAR(254) NOT NULL,
    name VARCHAR(120) NOT NULL,
    password_hash VARCHAR(100) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    password_changed_at DATETIME(3) NOT NULL,
    created_at DATETIME(3) NOT NULL,
    UNIQUE KEY people_email (email)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS memberships (
    team_id ${id} NOT NULL,
    person_id ${id} NOT NULL,
    role ENUM('engineer', 'operator', 'reviewer', 'administrator') NOT NULL,
    role_since DATETIME(3) NOT NULL,
    PRIMARY KEY (team_id, person_id),
    KEY memberships_person (person_id),
    CONSTRAINT memberships_team FOREIGN KEY (team_id) REFERENCES teams (id),
    CONSTRAINT memberships_person FOREIGN KEY (person_id) REFERENCES people (id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS sessions (
    id_hash ${hash} NOT NULL PRIMARY KEY,
    person_id ${id} NULL,
    data TEXT NOT NULL,
    created_at DATETIME(3) NOT NULL,
    seen_at DATETIME(3) NOT NULL,
    KEY sessions_person (person_id),
    KEY sessions_seen (seen_at)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS api_keys (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    name VARCHAR(120) NOT NULL,
    scopes VARCHAR(100) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    secret_hash ${hash} NOT NULL,
    hint CHAR(4) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    former_hash ${hash} NULL,
    overlap_until DATETIME(3) NULL,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    expires_at DATETIME(3) NOT NULL,
    last_used_at DATETIME(3) NULL,
    revoked_at DATETIME(3) NULL,
    UNIQUE KEY api_keys_secret (secret_hash),
    KEY api_keys_team (team_id, id),
    CONSTRAINT api_keys_team FOREIGN KEY (team_id) REFERENCES teams (id)
  )`)
}
