"""The journal's tables: what a run writes while it works, and nothing that could be derived later.

``user_version`` is the format's number. A journal of a newer format is refused by name; one of
format 1 can always be read. Times are whole microseconds since 1970-01-01 UTC; missing numbers
are NULL. A reading is one row with the reply's bytes beside the decoded numbers, so that a later
hand can decode it again.
"""

from ohmward.terms.status import Status

USER_VERSION = 1

TABLES = """
CREATE TABLE run (
    key TEXT PRIMARY KEY,
    value TEXT NOT NULL
) WITHOUT ROWID;
CREATE TABLE instrument (
    name TEXT PRIMARY KEY,
    role TEXT NOT NULL,
    address TEXT NOT NULL,
    identity TEXT NOT NULL,
    driver TEXT NOT NULL,
    driver_sha256 TEXT NOT NULL
) WITHOUT ROWID;
CREATE TABLE stage (
    number INTEGER PRIMARY KEY,
    name TEXT NOT NULL,
    kind TEXT NOT NULL,
    part_id TEXT NOT NULL,
    position TEXT NOT NULL,
    state TEXT NOT NULL CHECK (state IN ('begun', 'ended', 'stopped'))
);
CREATE TABLE setting (
    stage INTEGER NOT NULL REFERENCES stage (number) DEFERRABLE INITIALLY DEFERRED,
    instrument TEXT NOT NULL,
    name TEXT NOT NULL,
    value TEXT NOT NULL,
    PRIMARY KEY (stage, instrument, name)
) WITHOUT ROWID;
CREATE TABLE impedance (
    reading INTEGER PRIMARY KEY,
    stage INTEGER NOT NULL REFERENCES stage (number) DEFERRABLE INITIALLY DEFERRED,
    point INTEGER NOT NULL,
    repeat INTEGER NOT NULL,
    time_us INTEGER NOT NULL,
    elapsed_s REAL NOT NULL,
    frequency_hz REAL NOT NULL,
    level_set_v REAL NOT NULL,
    level_v REAL,
    bias_set_v REAL NOT NULL,
    bias_v REAL,
    bias_set_a REAL NOT NULL,
    bias_a REAL,
    range TEXT NOT NULL,
    integration TEXT NOT NULL,
    status TEXT NOT NULL,
    pair TEXT NOT NULL,
    first REAL,
    second REAL,
    first_resolution REAL,
    second_resolution REAL,
    temperature_c REAL,
    humidity_pct REAL,
    instrument TEXT NOT NULL,
    reply BLOB NOT NULL,
    UNIQUE (stage, point, repeat)
);
CREATE TABLE hold (
    stage INTEGER NOT NULL REFERENCES stage (number) DEFERRABLE INITIALLY DEFERRED,
    hold INTEGER NOT NULL,
    asked TEXT NOT NULL,
    held TEXT NOT NULL,
    PRIMARY KEY (stage, hold)
) WITHOUT ROWID;
CREATE TABLE leakage (
    reading INTEGER PRIMARY KEY,
    stage INTEGER NOT NULL REFERENCES stage (number) DEFERRABLE INITIALLY DEFERRED,
    hold INTEGER NOT NULL,
    time_us INTEGER NOT NULL,
    elapsed_s REAL NOT NULL,
    since_voltage_s REAL NOT NULL,
    voltage_set_v REAL NOT NULL,
    voltage_v REAL,
    current_a REAL,
    divider_a REAL NOT NULL,
    background_a REAL,
    range_a REAL,
    status TEXT NOT NULL,
    temperature_c REAL,
    humidity_pct REAL,
    instrument TEXT NOT NULL,
    current_reply TEXT NOT NULL,
    voltage_reply TEXT NOT NULL
);
CREATE TABLE event (
    event INTEGER PRIMARY KEY,
    time_us INTEGER NOT NULL,
    elapsed_s REAL NOT NULL,
    part_id TEXT NOT NULL,
    position TEXT NOT NULL,
    stage TEXT NOT NULL,
    kind TEXT NOT NULL,
    detail TEXT NOT NULL
);
"""

IMPEDANCE_COLUMNS = (
    "stage",
    "point",
    "repeat",
    "time_us",
    "elapsed_s",
    "frequency_hz",
    "level_set_v",
    "level_v",
    "bias_set_v",
    "bias_v",
    "bias_set_a",
    "bias_a",
    "range",
    "integration",
    "status",
    "pair",
    "first",
    "second",
    "first_resolution",
    "second_resolution",
    "temperature_c",
    "humidity_pct",
    "instrument",
    "reply",
)
LEAKAGE_COLUMNS = (
    "stage",
    "hold",
    "time_us",
    "elapsed_s",
    "since_voltage_s",
    "voltage_set_v",
    "voltage_v",
    "current_a",
    "divider_a",
    "background_a",
    "range_a",
    "status",
    "temperature_c",
    "humidity_pct",
    "instrument",
    "current_reply",
    "voltage_reply",
)
EVENT_COLUMNS = ("time_us", "elapsed_s", "part_id", "position", "stage", "kind", "detail")


def insert(table: str, columns: tuple[str, ...]) -> str:
    """The INSERT statement for these columns of a table."""
    marks = ", ".join("?" * len(columns))
    return f"INSERT INTO {table} ({', '.join(columns)}) VALUES ({marks})"


INSERT_IMPEDANCE = insert("impedance", IMPEDANCE_COLUMNS)
INSERT_LEAKAGE = insert("leakage", LEAKAGE_COLUMNS)
INSERT_HOLD = "INSERT OR REPLACE INTO hold (stage, hold, asked, held) VALUES (?, ?, ?, ?)"
FORGET_LEAKAGE = "DELETE FROM leakage WHERE stage = ?"
FORGET_HOLDS = "DELETE FROM hold WHERE stage = ?"
INSERT_EVENT = insert("event", EVENT_COLUMNS)
INSERT_FACT = "INSERT OR REPLACE INTO run (key, value) VALUES (?, ?)"
# A run that is taken up again meets the instruments that it began with: they are there already.
INSERT_INSTRUMENT = (
    insert("instrument", ("name", "role", "address", "identity", "driver", "driver_sha256"))
    + " ON CONFLICT (name) DO NOTHING"
)
BEGIN_STAGE = (
    "INSERT INTO stage (number, name, kind, part_id, position, state)"
    " VALUES (?, ?, ?, ?, ?, 'begun') ON CONFLICT (number) DO UPDATE SET state = 'begun'"
)
DISCONNECT = (
    f"UPDATE impedance SET status = '{Status.DISCONNECTED}'"
    f" WHERE stage = ? AND elapsed_s >= ? AND status = '{Status.OK}'"
)
END_STAGE = "UPDATE stage SET state = ? WHERE number = ?"
INSERT_SETTING = (
    "INSERT OR REPLACE INTO setting (stage, instrument, name, value) VALUES (?, ?, ?, ?)"
)
