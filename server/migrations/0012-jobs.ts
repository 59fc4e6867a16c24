import type { QueryInterface } from 'sequelize'

const id = 'CHAR(36) CHARACTER SET ascii COLLATE ascii_bin'

export async function up({ sequelize }: QueryInterface): Promise<void> {
  await sequelize.query(`CREATE TABLE IF NOT EXISTS jobs (
    id ${id} NOT NULL PRIMARY KEY,
    team_id ${id} NOT NULL,
    kind VARCHAR(40) CHARACTER SET ascii COLLATE ascii_bin NOT NULL,
    state ENUM('queued', 'running', 'done', 'failed', 'cancelled') NOT NULL,
    progress DOUBLE NOT NULL,
    message VARCHAR(300) NOT NULL,
    parameters JSON NOT NULL,
    work JSON NOT NULL,
    result JSON NULL,
    problem JSON NULL,
    change_number INT UNSIGNED NOT NULL DEFAULT 1,
    created_at DATETIME(3) NOT NULL,
    created_by VARCHAR(160) NOT NULL,
    started_at DATETIME(3) NULL,
    ended_at DATETIME(3) NULL,
    cancel_by VARCHAR(160) NULL,
    cancel_reason VARCHAR(500) NULL,
    cancel_at DATETIME(3) NULL,
    lease_owner ${id} NULL,
    lease_until DATETIME(3) NULL,
    KEY jobs_state (state, id),
    KEY jobs_team (team_id, id),
    CONSTRAINT jobs_team FOREIGN KEY (team_id) REFERENCES teams (id)
  )`)
  await sequelize.query(`CREATE TABLE IF NOT EXISTS job_points (
    job_id ${id} NOT NULL,
    number INT UNSIGNED NOT NULL,
    series VARCHAR(60) NOT NULL,
    x DOUBLE NOT NULL,
    y DOUBLE NOT NULL,
    PRIMARY KEY (job_id, number),
    CONSTRAINT job_points_job FOREIGN KEY (job_id) REFERENCES jobs (id)
  )`)
}
