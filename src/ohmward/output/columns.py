"""Every column of every table: its name, datatype, unit and meaning, and each table's key.

The names are those of the quantities (``ohmward.terms.quantity``); the metadata beside each
table is made from this page, so that a table and its description cannot part ways.
"""

from dataclasses import dataclass


@dataclass(frozen=True, kw_only=True, slots=True)
class Column:
    """One column; ``datatype`` is a CSVW (XML Schema) base type."""

    name: str
    datatype: str
    unit: str = ""
    meaning: str = ""
    required: bool = False


@dataclass(frozen=True, kw_only=True, slots=True)
class Table:
    """One table: its file name, what a row is, its columns in order and its primary key."""

    file: str
    row: str
    columns: tuple[Column, ...]
    key: tuple[str, ...]

    @property
    def names(self) -> tuple[str, ...]:
        """The columns' names in order."""
        return tuple(column.name for column in self.columns)


def _text(name: str, meaning: str, *, required: bool = False) -> Column:
    return Column(name=name, datatype="string", meaning=meaning, required=required)


def _count(name: str, meaning: str) -> Column:
    return Column(name=name, datatype="integer", meaning=meaning, required=True)


def _number(name: str, unit: str, meaning: str, *, required: bool = False) -> Column:
    return Column(name=name, datatype="double", unit=unit, meaning=meaning, required=required)


def _with_u(name: str, unit: str, meaning: str) -> tuple[Column, Column]:
    uncertainty = f"standard uncertainty of {name}"
    return _number(name, unit, meaning), _number(f"u_{name}", unit, uncertainty)


RUN_ID = _text("run_id", "the run that this row belongs to", required=True)
READING = _count("reading", "number of the reading in the journal")
PART_ID = _text("part_id", "the part, as in the parts list", required=True)
POSITION = _text("position", "the fixture's position", required=True)
STAGE = _text("stage", "the sequence's stage", required=True)
TIME_UTC = Column(name="time_utc", datatype="dateTime", meaning="instant, UTC", required=True)
ELAPSED_S = _number("elapsed_s", "s", "monotonic time since the run began", required=True)
STATUS = _text("status", "what can be said of the reading before its number", required=True)
TEMPERATURE_C = _number("temperature_c", "degC", "room temperature")
HUMIDITY_PCT = _number("humidity_pct", "%", "relative humidity of the room")
INSTRUMENT = _text("instrument", "the instrument's name on the bench", required=True)
SIMULATED = Column(
    name="simulated", datatype="boolean", meaning="true on a simulated bench", required=True
)

IMPEDANCE = Table(
    file="impedance.csv",
    row="a reading of an impedance meter",
    key=("run_id", "reading"),
    columns=(
        RUN_ID,
        READING,
        PART_ID,
        POSITION,
        STAGE,
        _count("repeat", "which reading of its point, from 0"),
        TIME_UTC,
        ELAPSED_S,
        _number("frequency_hz", "Hz", "frequency", required=True),
        _number("level_set_v", "V", "AC level set, rms", required=True),
        _number("level_v", "V", "AC level read back, rms"),
        _number("bias_set_v", "V", "DC bias voltage set", required=True),
        _number("bias_v", "V", "DC bias voltage read back"),
        _number("bias_set_a", "A", "DC bias current set", required=True),
        _number("bias_a", "A", "DC bias current read back"),
        _text("range", "the meter's range, as it names it"),
        _text("integration", "the meter's integration setting"),
        STATUS,
        _number("resistance_ohm", "ohm", "real part of the impedance"),
        _number("reactance_ohm", "ohm", "imaginary part of the impedance"),
        _number("u_resistance_ohm", "ohm", "standard uncertainty of resistance_ohm"),
        _number("u_reactance_ohm", "ohm", "standard uncertainty of reactance_ohm"),
        _number("r_rx", "1", "correlation coefficient of resistance and reactance"),
        *_with_u("impedance_ohm", "ohm", "magnitude of the impedance"),
        *_with_u("phase_rad", "rad", "angle of the impedance"),
        *_with_u("cs_f", "F", "capacitance, series model"),
        *_with_u("cp_f", "F", "capacitance, parallel model"),
        *_with_u("ls_h", "H", "inductance, series model"),
        *_with_u("lp_h", "H", "inductance, parallel model"),
        *_with_u("rs_ohm", "ohm", "equivalent series resistance"),
        *_with_u("rp_ohm", "ohm", "equivalent parallel resistance"),
        *_with_u("d", "1", "dissipation factor"),
        *_with_u("q", "1", "quality factor"),
        TEMPERATURE_C,
        HUMIDITY_PCT,
        INSTRUMENT,
        SIMULATED,
    ),
)

LEAKAGE = Table(
    file="leakage.csv",
    row="a current reading under voltage",
    key=("run_id", "reading"),
    columns=(
        RUN_ID,
        READING,
        PART_ID,
        POSITION,
        STAGE,
        TIME_UTC,
        ELAPSED_S,
        _number(
            "since_voltage_s", "s", "time since the part's voltage was within 1 % of the set one"
        ),
        _number("voltage_set_v", "V", "DC voltage set", required=True),
        _number("voltage_v", "V", "DC voltage across the part's own terminals"),
        _number("current_a", "A", "current through the part: as read, less divider and background"),
        _number("background_a", "A", "current read with the position empty, taken off"),
        _number("u_current_a", "A", "standard uncertainty of current_a"),
        _number("insulation_ohm", "ohm", "insulation resistance: voltage over current"),
        _text("range", "the current meter's range"),
        STATUS,
        TEMPERATURE_C,
        HUMIDITY_PCT,
        INSTRUMENT,
        SIMULATED,
    ),
)

CONDITIONS = (
    _number("frequency_hz", "Hz", "frequency of the value; empty where it has none"),
    _number("level_v", "V", "AC level of the value, rms"),
    _number("bias_v", "V", "DC bias of the value"),
    _number("bias_a", "A", "DC bias current of the value"),
    _number("voltage_v", "V", "DC voltage under which a current was read"),
    _number("since_voltage_s", "s", "time since that voltage was reached"),
    _number(
        "reference_temperature_c", "degC", "temperature carried to; empty for as it was measured"
    ),
    _number("reference_age_s", "s", "time since the last heating carried to; empty likewise"),
)
QUANTITY = _text("quantity", "what is judged or reported", required=True)
UNIT = _text("unit", "the value's unit; 1 for a plain number", required=True)

RESULTS = Table(
    file="results.csv",
    row="a judged or reported quantity of a part",
    key=("run_id", "part_id", "stage", "quantity", *(column.name for column in CONDITIONS)),
    columns=(
        RUN_ID,
        PART_ID,
        STAGE,
        QUANTITY,
        *CONDITIONS,
        _number("value", "", "the value, in the row's unit; empty where there is none"),
        _number("u_expanded", "", "expanded uncertainty, in the row's unit"),
        _number("coverage_k", "1", "coverage factor: u_expanded over the standard uncertainty"),
        UNIT,
        _number("limit_min", "", "lower limit, in the row's unit"),
        _number("limit_max", "", "upper limit, in the row's unit"),
        _text("limit_source", "who says so: the limit's source"),
        _text("decision", "accept, reject, undecided, invalid or reported", required=True),
        _text("reason", "the decision in a sentence", required=True),
    ),
)

EVENTS = Table(
    file="events.csv",
    row="a thing that happened",
    key=("run_id", "event"),
    columns=(
        RUN_ID,
        _count("event", "number of the event in the journal"),
        TIME_UTC,
        ELAPSED_S,
        _text("part_id", "the part concerned, if any"),
        _text("position", "the position concerned, if any"),
        _text("stage", "the stage concerned, if any"),
        _text("kind", "what happened", required=True),
        _text("detail", "more about it"),
    ),
)

TRUTH = Table(
    file="truth.csv",
    row="the true value behind a row of results.csv, known on a simulated bench only",
    key=("part_id", "stage", "quantity", *(column.name for column in CONDITIONS)),
    columns=(
        PART_ID,
        STAGE,
        QUANTITY,
        *CONDITIONS,
        _number("true_value", "", "what the simulated part really is, in the row's unit"),
        UNIT,
        _text("fault", "the simulated part's fault; empty for a good part"),
    ),
)
