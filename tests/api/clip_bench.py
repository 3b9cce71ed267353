"""A bench whose fixture matters: long clips, their standards, parts that feel them, a sequence."""

from pathlib import Path

BENCH = """format = 1
name = "clip bench"

[instrument.meter]
role = "impedance meter"
driver = "scpi-impedance-meter"
address = "TCPIP::192.0.2.21::5025::SOCKET"
cable = "1 m"

[instrument.switch]
role = "scanner"
driver = "scpi-scanner"
address = "TCPIP::192.0.2.22::5025::SOCKET"

[instrument.room]
role = "thermometer"
driver = "scpi-thermometer"
address = "TCPIP::192.0.2.23::5025::SOCKET"

[fixture]
loading = "scanner"
name = "long clips"
standards = "standards.toml"

[simulation]
physical_file = "physics.toml"

[[position]]
name = "1"
meter_channels = ["101", "201"]

[[position]]
name = "2"
meter_channels = ["102", "202"]

[[position]]
name = "3"
meter_channels = ["103", "203"]
"""

# 80 mohm and 150 nH in series, 4 pF and 10 nS across: the meter sees them, the parts have them not
PHYSICS = """format = 1

[room]
temperature_c = 26.0
swing_k = 0.0

[fixture]
series_ohm = 0.08
series_h = 1.5e-7
stray_f = 4e-12
stray_s = 1e-8

[standard.open]
stray_f = 2e-15
[standard.short]
series_ohm = 2.3e-4
series_h = 6e-10
contact_ohm = 3e-4
contact_h = 2e-10
[standard.load]
series_ohm = 100.003
series_h = 5e-9
contact_ohm = 3e-4
contact_h = 2e-10
"""

STANDARDS = """format = 1
name = "the tests' standards"
[open]
capacitance = "0 F"
capacitance_uncertainty = "5 fF"
[short]
resistance = "0.2 mohm"
resistance_uncertainty = "0.1 mohm"
inductance = "0.5 nH"
inductance_uncertainty = "0.4 nH"
[load]
resistance = "100 ohm"
resistance_uncertainty = "10 mohm"
inductance = "4 nH"
inductance_uncertainty = "4 nH"
"""

SEQUENCE = """format = 1
name = "clips"
purpose = "Show what a fixture does"
follows = "the test"
kinds = ["capacitor", "inductor", "resistor"]

[compensation]
standards = ["open", "short", "load"]
at_most = "24 h"

[[stage]]
kind = "sweep"
name = "capacitor"
parts = { kind = "capacitor" }
frequency = ["1 kHz", "10 kHz", "100 kHz"]
level = "1 V"
integration = "long"
repeats = 3

[[stage]]
kind = "sweep"
name = "inductor"
parts = { kind = "inductor" }
frequency = ["10 kHz", "100 kHz"]
level = "1 V"
integration = "long"

[[stage]]
kind = "sweep"
name = "resistor"
parts = { kind = "resistor" }
frequency = ["1 kHz"]
level = "1 V"
integration = "long"

[[limit]]
stage = "capacitor"
quantity = "cp_f"
at = { frequency = "100 kHz" }
min = "-20 %"
max = "+20 %"
source = "the test"

[[limit]]
stage = "inductor"
quantity = "ls_h"
at = { frequency = "100 kHz" }
min = "-20 %"
max = "+20 %"
source = "the test"

[[limit]]
stage = "resistor"
quantity = "rs_ohm"
min = "-5 %"
max = "+5 %"
source = "the test"
"""

PARTS = """part_id,position,kind,nominal,tolerance,rated_voltage,rated_current,dielectric
C,1,capacitor,100 pF,±5 %,100 V DC,,C0G
L,2,inductor,4.7 uH,±10 %,,0.5 A,
R,3,resistor,1 ohm,±5 %,,,
"""

FILES = {
    "bench.toml": BENCH,
    "physics.toml": PHYSICS,
    "standards.toml": STANDARDS,
    "sequence.toml": SEQUENCE,
    "parts.csv": PARTS,
}


def write_bench(folder: Path, **changed: str) -> Path:
    """The files in a folder; ``changed`` replaces whole files by their stem."""
    folder.mkdir(exist_ok=True)
    for name, text in FILES.items():
        (folder / name).write_text(changed.get(name.partition(".")[0], text), "utf-8")
    return folder
