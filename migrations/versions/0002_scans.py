"""What scans counted, which secular frequencies they found, what was due when, and the views people read.

As in 0001: raw SQL, append-only for every program, no way down, and no second UNIQUE column.
"""

from alembic import op

revision = "0002"
down_revision = "0001"
branch_labels = None
depends_on = None

# With the tickle on, something was sent, and so there is an intent before it.
SCAN_POINTS = """
CREATE TABLE scan_points (
    seq          INTEGER PRIMARY KEY REFERENCES entries (seq),
    request      INTEGER NOT NULL REFERENCES entries (seq),
    intent       INTEGER REFERENCES intents (seq),
    pass_number  INTEGER NOT NULL,
    point        INTEGER NOT NULL,
    frequency_hz REAL CHECK (abs(frequency_hz) < 9e999),
    level_v      REAL NOT NULL CHECK (abs(level_v) < 9e999),
    dwell_s      REAL NOT NULL CHECK (abs(dwell_s) < 9e999),
    counts       INTEGER NOT NULL CHECK (counts >= 0),
    at_us        INTEGER NOT NULL,
    CHECK (frequency_hz IS NULL OR intent IS NOT NULL)
) STRICT
"""

SECULAR_FREQUENCIES = """
CREATE TABLE secular_frequencies (
    seq                      INTEGER PRIMARY KEY REFERENCES entries (seq),
    request                  INTEGER NOT NULL REFERENCES entries (seq),
    finding                  INTEGER NOT NULL REFERENCES entries (seq),
    scan                     TEXT NOT NULL CHECK (scan <> ''),
    species                  TEXT NOT NULL CHECK (species <> ''),
    mode                     TEXT NOT NULL CHECK (mode <> ''),
    frequency_hz             REAL NOT NULL CHECK (abs(frequency_hz) < 9e999),
    uncertainty_hz           REAL NOT NULL CHECK (abs(uncertainty_hz) < 9e999),
    low_95_hz                REAL NOT NULL CHECK (abs(low_95_hz) < 9e999),
    high_95_hz               REAL NOT NULL CHECK (abs(high_95_hz) < 9e999),
    at_us                    INTEGER NOT NULL,
    predicted_hz             REAL NOT NULL CHECK (abs(predicted_hz) < 9e999),
    predicted_uncertainty_hz REAL NOT NULL CHECK (abs(predicted_uncertainty_hz) < 9e999),
    width_hz                 REAL NOT NULL CHECK (abs(width_hz) < 9e999),
    contrast                 REAL NOT NULL CHECK (abs(contrast) < 9e999),
    likelihood_ratio         REAL NOT NULL CHECK (abs(likelihood_ratio) < 9e999),
    method                   TEXT NOT NULL,
    fit_version              TEXT NOT NULL,
    calibration              INTEGER REFERENCES entries (seq),
    flags                    TEXT NOT NULL,
    points                   INTEGER NOT NULL,
    who                      TEXT NOT NULL,
    why                      TEXT NOT NULL
) STRICT
"""

DUE_RUNS = """
CREATE TABLE due_runs (
    seq      INTEGER PRIMARY KEY REFERENCES entries (seq),
    schedule TEXT NOT NULL CHECK (schedule <> ''),
    scan     TEXT NOT NULL CHECK (scan <> ''),
    due_us   INTEGER NOT NULL,
    state    TEXT NOT NULL CHECK (state IN ('run', 'late', 'skipped', 'missed')),
    late_s   REAL NOT NULL CHECK (abs(late_s) < 9e999),
    request  INTEGER REFERENCES entries (seq),
    reason   TEXT NOT NULL
) STRICT
"""

INDICES = (
    "CREATE INDEX scan_points_by_request ON scan_points (request)",
    "CREATE INDEX secular_frequencies_by_finding ON secular_frequencies (finding)",
    "CREATE INDEX due_runs_by_schedule ON due_runs (schedule, due_us)",
)

APPEND_ONLY = """
CREATE TRIGGER {table}_no_{verb} BEFORE {verb} ON {table} BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: no {verb} on {table}');
END
"""

SCAN_POINTS_IN_ORDER = """
CREATE TRIGGER scan_points_in_order BEFORE INSERT ON scan_points
WHEN NEW.seq <= (SELECT max(seq) FROM scan_points)
    OR (SELECT kind FROM entries WHERE seq = NEW.seq) IS NOT 'scan_point'
    OR NEW.request >= NEW.seq
    OR NEW.intent >= NEW.seq BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: a scan point goes with its new entry, after its intent');
END
"""

SECULAR_FREQUENCIES_IN_ORDER = """
CREATE TRIGGER secular_frequencies_in_order BEFORE INSERT ON secular_frequencies
WHEN NEW.seq <= (SELECT max(seq) FROM secular_frequencies)
    OR (SELECT kind FROM entries WHERE seq = NEW.seq) IS NOT 'secular_frequency'
    OR NEW.request >= NEW.seq
    OR NEW.finding >= NEW.seq
    OR (SELECT kind FROM entries WHERE seq = NEW.finding) IS NOT 'finding'
    OR EXISTS (SELECT 1 FROM secular_frequencies WHERE finding = NEW.finding) BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: a frequency goes with its new entry and a finding without one');
END
"""

DUE_RUNS_IN_ORDER = """
CREATE TRIGGER due_runs_in_order BEFORE INSERT ON due_runs
WHEN NEW.seq <= (SELECT max(seq) FROM due_runs)
    OR (SELECT kind FROM entries WHERE seq = NEW.seq) IS NOT 'due_run'
    OR NEW.request >= NEW.seq BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: a due run goes with its new entry');
END
"""


def time_text(column: str) -> str:
    """SQL for UTC microseconds as RFC 3339 text with six decimals; NULL stays NULL."""
    seconds = f"strftime('%Y-%m-%dT%H:%M:%S', {column} / 1000000, 'unixepoch')"
    return f"{seconds} || printf('.%06dZ', {column} % 1000000)"


# Every scan that began, whatever became of it. Grouped, because a join of what says so request by request has no index.
SCANS = f"""
CREATE VIEW scans AS
WITH told AS (
    SELECT json_extract(body, '$.data.request') AS request, max(seq) FILTER (WHERE kind = 'plan') AS plan,
        max(seq) FILTER (WHERE kind = 'finding') AS finding, max(seq) FILTER (WHERE kind = 'result') AS result
    FROM entries WHERE kind IN ('plan', 'finding', 'result')
    GROUP BY 1
)
SELECT r.seq AS seq, {time_text("r.time_us")} AS time, json_extract(p.body, '$.data.scan') AS scan,
    json_extract(p.body, '$.data.mode') AS mode, json_extract(p.body, '$.data.species') AS species,
    coalesce(json_extract(f.body, '$.data.state'), json_extract(e.body, '$.data.state'), 'unknown') AS state,
    json_extract(f.body, '$.data.frequency_hz') AS frequency_hz,
    json_extract(f.body, '$.data.uncertainty_hz') AS uncertainty_hz,
    json_extract(p.body, '$.data.predicted_hz') AS predicted_hz,
    json_extract(p.body, '$.data.min_contrast') AS min_contrast,
    coalesce(json_extract(f.body, '$.data.message'), json_extract(e.body, '$.data.error')) AS message,
    coalesce((SELECT group_concat(value, ' ') FROM json_each(f.body, '$.data.flags')), '') AS flags,
    r.actor AS who, coalesce(json_extract(r.body, '$.data.why'), '') AS why,
    f.seq AS finding, r.time_us AS time_us
FROM told
JOIN entries AS r ON r.seq = told.request
JOIN entries AS p ON p.seq = told.plan
LEFT JOIN entries AS f ON f.seq = told.finding
LEFT JOIN entries AS e ON e.seq = told.result
"""

# Besides the guard's: what was refused before it came as far as a verdict.
REFUSALS = f"""
CREATE VIEW refusals AS
WITH alone AS (
    SELECT max(seq) AS seq FROM entries WHERE kind IN ('verdict', 'result')
    GROUP BY json_extract(body, '$.data.request') HAVING sum(kind = 'verdict') = 0
), x AS (
    SELECT v.seq AS seq, reason.value AS reason
    FROM entries AS v JOIN json_each(v.body, '$.data.reasons') AS reason
    WHERE v.kind = 'verdict' AND json_extract(v.body, '$.data.accepted') = 0
    UNION ALL
    SELECT e.seq, json_object('rule', 'conflict', 'message', json_extract(e.body, '$.data.error'))
    FROM alone JOIN entries AS e ON e.seq = alone.seq
    WHERE json_extract(e.body, '$.data.code') = 'conflict' AND json_extract(e.body, '$.data.state') = 'failed'
)
SELECT said.seq AS seq, {time_text("said.time_us")} AS time,
    coalesce(r.actor, said.actor) AS who, coalesce(json_extract(r.body, '$.data.why'), '') AS why,
    json_extract(x.reason, '$.rule') AS rule, json_extract(x.reason, '$.quantity') AS quantity,
    json_extract(x.reason, '$.unit') AS unit, json_extract(x.reason, '$.found') AS found,
    json_extract(x.reason, '$.bound') AS bound, json_extract(x.reason, '$.nearest') AS nearest,
    json_extract(x.reason, '$.species') AS species, json_extract(x.reason, '$.mode') AS mode,
    json_extract(x.reason, '$.message') AS message,
    r.seq AS request, said.time_us AS time_us
FROM x
JOIN entries AS said ON said.seq = x.seq
LEFT JOIN entries AS r ON r.seq = json_extract(said.body, '$.data.request') AND r.kind = 'request'
"""

# The scan's name, beside the point's.
REQUESTS = f"""
CREATE VIEW requests AS
WITH v AS MATERIALIZED (
    SELECT seq, json_extract(body, '$.data.request') AS request, json_extract(body, '$.data.accepted') AS accepted
    FROM entries WHERE kind = 'verdict'
)
SELECT r.seq AS seq, {time_text("r.time_us")} AS time, r.actor AS who,
    json_extract(r.body, '$.data.kind') AS kind, json_extract(r.body, '$.data.point') AS point,
    json_extract(r.body, '$.data.scan') AS scan, json_extract(r.body, '$.data.values') AS "values",
    json_extract(r.body, '$.data.why') AS why, v.seq AS verdict, v.accepted AS accepted, r.time_us AS time_us
FROM entries AS r
LEFT JOIN v ON v.request = r.seq
WHERE r.kind = 'request'
"""

# sqrt() is there in SQLite from 3.35 on where it is built with its mathematical functions, as distributions do.
FREQUENCIES = f"""
CREATE VIEW frequencies AS
SELECT seq AS seq, {time_text("at_us")} AS time, scan AS scan, species AS species, mode AS mode,
    frequency_hz AS frequency_hz, uncertainty_hz AS uncertainty_hz, low_95_hz AS low_95_hz, high_95_hz AS high_95_hz,
    predicted_hz AS predicted_hz, predicted_uncertainty_hz AS predicted_uncertainty_hz,
    frequency_hz - predicted_hz AS difference_hz,
    (frequency_hz - predicted_hz)
        / sqrt(uncertainty_hz * uncertainty_hz + predicted_uncertainty_hz * predicted_uncertainty_hz)
        AS difference_sigma,
    width_hz AS width_hz, contrast AS contrast, flags AS flags, who AS who, why AS why,
    request AS request, finding AS finding, at_us AS at_us
FROM secular_frequencies
"""

DUE_TIMES = f"""
CREATE VIEW due_times AS
SELECT d.seq AS seq, {time_text("d.due_us")} AS due, d.schedule AS schedule, d.scan AS scan, d.state AS state,
    d.late_s AS late_s, d.reason AS reason, d.request AS request,
    {time_text("e.time_us")} AS time, d.due_us AS due_us, e.time_us AS time_us
FROM due_runs AS d
JOIN entries AS e ON e.seq = d.seq
"""


def upgrade() -> None:
    append_only = [
        APPEND_ONLY.format(table=table, verb=verb)
        for table in ("scan_points", "secular_frequencies", "due_runs")
        for verb in ("update", "delete")
    ]
    in_order = (SCAN_POINTS_IN_ORDER, SECULAR_FREQUENCIES_IN_ORDER, DUE_RUNS_IN_ORDER)
    tables = (SCAN_POINTS, SECULAR_FREQUENCIES, DUE_RUNS, *INDICES, *append_only, *in_order)
    again = ("DROP VIEW refusals", "DROP VIEW requests", REFUSALS, REQUESTS)
    for statement in (*tables, *again, SCANS, FREQUENCIES, DUE_TIMES):
        op.get_bind().exec_driver_sql(statement)  # not op.execute, as in 0001
