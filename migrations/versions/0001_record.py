"""The chained stream of entries, the typed tables of intents and outcomes, and the views people read.

Raw SQL, so that what is in the file can be read here word for word. There is no way down: nothing is thinned out.

Append-only, for every program that writes: UPDATE and DELETE raise. `INSERT OR REPLACE` deletes without firing a delete
trigger unless `recursive_triggers` is on, so an INSERT must carry a seq beyond every seq that exists; for that to be
enough no table may have a second UNIQUE column, which is why the indices are not unique.
"""

from alembic import op

revision = "0001"
down_revision = None
branch_labels = None
depends_on = None

# "trap", so that `file` and we can tell a record from any other SQLite file.
APPLICATION_ID = "PRAGMA application_id = 1953653104"

ENTRIES = """
CREATE TABLE entries (
    seq          INTEGER PRIMARY KEY CHECK (seq > 0),
    time_us      INTEGER NOT NULL,
    monotonic_ns INTEGER NOT NULL,
    boot_id      TEXT NOT NULL,
    kind         TEXT NOT NULL CHECK (kind <> ''),
    actor        TEXT NOT NULL CHECK (actor <> ''),
    body         TEXT NOT NULL,
    digest       TEXT NOT NULL CHECK (length(digest) = 64)
) STRICT
"""

# abs(x) < 9e999 is false for either infinity; NaN becomes NULL, which NOT NULL refuses.
INTENTS = """
CREATE TABLE intents (
    seq        INTEGER PRIMARY KEY REFERENCES entries (seq),
    request    INTEGER REFERENCES entries (seq),
    verdict    INTEGER REFERENCES entries (seq),
    ramp       INTEGER REFERENCES entries (seq),
    step       INTEGER,
    setpoint   TEXT NOT NULL CHECK (setpoint <> ''),
    value      REAL NOT NULL CHECK (abs(value) < 9e999),
    unit       TEXT NOT NULL,
    instrument TEXT NOT NULL CHECK (instrument <> ''),
    channel    INTEGER,
    quantity   TEXT NOT NULL CHECK (quantity <> ''),
    level      REAL NOT NULL CHECK (abs(level) < 9e999),
    who        TEXT NOT NULL,
    why        TEXT NOT NULL
) STRICT
"""

OUTCOMES = """
CREATE TABLE outcomes (
    seq             INTEGER PRIMARY KEY REFERENCES entries (seq),
    intent          INTEGER NOT NULL REFERENCES intents (seq),
    state           TEXT NOT NULL CHECK (state <> ''),
    sent_us         INTEGER,
    acknowledged_us INTEGER,
    verified_us     INTEGER,
    readback        REAL CHECK (abs(readback) < 9e999),
    difference      REAL CHECK (abs(difference) < 9e999),
    error           TEXT
) STRICT
"""

INDICES = (
    "CREATE INDEX entries_by_kind ON entries (kind)",
    "CREATE INDEX entries_by_time ON entries (time_us)",
    "CREATE INDEX intents_by_setpoint ON intents (setpoint, quantity)",
    "CREATE INDEX outcomes_by_intent ON outcomes (intent)",
)

APPEND_ONLY = """
CREATE TRIGGER {table}_no_{verb} BEFORE {verb} ON {table} BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: no {verb} on {table}');
END
"""

ENTRIES_IN_ORDER = """
CREATE TRIGGER entries_in_order BEFORE INSERT ON entries
WHEN NEW.seq IS NOT 1 + coalesce((SELECT max(seq) FROM entries), 0) BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: seq must be the next one');
END
"""

INTENTS_IN_ORDER = """
CREATE TRIGGER intents_in_order BEFORE INSERT ON intents
WHEN NEW.seq <= (SELECT max(seq) FROM intents)
    OR (SELECT kind FROM entries WHERE seq = NEW.seq) IS NOT 'intent' BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: an intent goes with its new entry');
END
"""

OUTCOMES_IN_ORDER = """
CREATE TRIGGER outcomes_in_order BEFORE INSERT ON outcomes
WHEN NEW.seq <= (SELECT max(seq) FROM outcomes)
    OR (SELECT kind FROM entries WHERE seq = NEW.seq) IS NOT 'outcome'
    OR NEW.intent >= NEW.seq
    OR NOT EXISTS (SELECT 1 FROM intents WHERE seq = NEW.intent)
    OR EXISTS (SELECT 1 FROM outcomes WHERE intent = NEW.intent) BEGIN
    SELECT RAISE(ABORT, 'the record is append-only: an outcome goes with its new entry and an intent without one');
END
"""


def time_text(column: str) -> str:
    """SQL for UTC microseconds as RFC 3339 text with six decimals; NULL stays NULL."""
    seconds = f"strftime('%Y-%m-%dT%H:%M:%S', {column} / 1000000, 'unixepoch')"
    return f"{seconds} || printf('.%06dZ', {column} % 1000000)"


SETPOINTS = f"""
CREATE VIEW setpoints AS
SELECT i.seq AS seq, {time_text("e.time_us")} AS time,
    i.setpoint AS setpoint, i.value AS value, i.unit AS unit,
    coalesce(o.state, 'unknown') AS state, o.readback AS readback, o.difference AS difference, o.error AS error,
    i.instrument AS instrument, i.channel AS channel, i.quantity AS quantity, i.level AS level,
    i.who AS who, i.why AS why,
    i.request AS request, i.verdict AS verdict, i.ramp AS ramp, i.step AS step, o.seq AS outcome,
    {time_text("o.sent_us")} AS sent, {time_text("o.acknowledged_us")} AS acknowledged,
    {time_text("o.verified_us")} AS verified,
    e.time_us AS time_us, o.sent_us AS sent_us, o.acknowledged_us AS acknowledged_us, o.verified_us AS verified_us
FROM intents AS i
JOIN entries AS e ON e.seq = i.seq
LEFT JOIN outcomes AS o ON o.intent = i.seq
"""

REFUSALS = f"""
CREATE VIEW refusals AS
SELECT v.seq AS seq, {time_text("v.time_us")} AS time,
    coalesce(r.actor, v.actor) AS who, coalesce(json_extract(r.body, '$.data.why'), '') AS why,
    json_extract(reason.value, '$.rule') AS rule, json_extract(reason.value, '$.quantity') AS quantity,
    json_extract(reason.value, '$.unit') AS unit, json_extract(reason.value, '$.found') AS found,
    json_extract(reason.value, '$.bound') AS bound, json_extract(reason.value, '$.nearest') AS nearest,
    json_extract(reason.value, '$.species') AS species, json_extract(reason.value, '$.mode') AS mode,
    json_extract(reason.value, '$.message') AS message,
    r.seq AS request, v.time_us AS time_us
FROM entries AS v
LEFT JOIN entries AS r ON r.seq = json_extract(v.body, '$.data.request') AND r.kind = 'request'
JOIN json_each(v.body, '$.data.reasons') AS reason
WHERE v.kind = 'verdict' AND json_extract(v.body, '$.data.accepted') = 0
"""

# MATERIALIZED: joined as it stands, it would parse every verdict once for each request. (An index on the JSON would
# shut out programs that run with SQLite's trusted_schema off.)
REQUESTS = f"""
CREATE VIEW requests AS
WITH v AS MATERIALIZED (
    SELECT seq, json_extract(body, '$.data.request') AS request, json_extract(body, '$.data.accepted') AS accepted
    FROM entries WHERE kind = 'verdict'
)
SELECT r.seq AS seq, {time_text("r.time_us")} AS time, r.actor AS who,
    json_extract(r.body, '$.data.kind') AS kind, json_extract(r.body, '$.data.point') AS point,
    json_extract(r.body, '$.data.values') AS "values", json_extract(r.body, '$.data.why') AS why,
    v.seq AS verdict, v.accepted AS accepted, r.time_us AS time_us
FROM entries AS r
LEFT JOIN v ON v.request = r.seq
WHERE r.kind = 'request'
"""


def upgrade() -> None:
    append_only = [
        APPEND_ONLY.format(table=table, verb=verb)
        for table in ("entries", "intents", "outcomes")
        for verb in ("update", "delete")
    ]
    tables = (APPLICATION_ID, ENTRIES, INTENTS, OUTCOMES, *INDICES, *append_only)
    for statement in (*tables, ENTRIES_IN_ORDER, INTENTS_IN_ORDER, OUTCOMES_IN_ORDER, SETPOINTS, REFUSALS, REQUESTS):
        # Not op.execute: it would read the colons of time formats as parameters.
        op.get_bind().exec_driver_sql(statement)
