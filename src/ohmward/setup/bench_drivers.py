"""Loads the driver of every instrument on a bench, and checks that it is one for its role."""

from ohmward.errors import Problems
from ohmward.setup.bench import Bench
from ohmward.setup.driver import Driver, load_driver
from ohmward.setup.files import is_file
from ohmward.setup.resources import shipped
from ohmward.setup.toml import one_of


def load_drivers(bench: Bench, problems: Problems) -> dict[str, Driver] | None:
    """The drivers by the instrument's name, or None with every problem noted.

    A driver named without ``.toml`` is a shipped one; a path is taken from the bench file's
    folder. Two instruments of one driver share it.
    """
    before = len(problems)
    loaded: dict[str, Driver | None] = {}
    for name, instrument in bench.instruments.items():
        wanted = instrument.driver
        if wanted not in loaded:
            loaded[wanted] = _load(bench, name, wanted, problems)
        driver = loaded[wanted]
        if driver is not None and driver.role is not instrument.role:
            problems.add(
                id="driver-of-another-role",
                file=bench.path,
                key=f"instrument.{name}.driver",
                expected=f"a driver for a {instrument.role.value}",
                found=f"'{wanted}', for a {driver.role.value}",
            )
    if len(problems) > before:
        return None
    return {
        name: driver
        for name, instrument in bench.instruments.items()
        if (driver := loaded[instrument.driver]) is not None
    }


def _load(bench: Bench, name: str, wanted: str, problems: Problems) -> Driver | None:
    """One driver; a name or path that leads nowhere is the bench file's problem."""
    known = sorted(path.stem for path in shipped("drivers").glob("*.toml"))
    is_path = wanted.endswith(".toml") or "/" in wanted or "\\" in wanted
    if is_path and not is_file(bench.path.parent / wanted):
        expected, found = "a driver file", f"none at {bench.path.parent / wanted}"
    elif not is_path and wanted not in known:
        expected, found = one_of(wanted, known), f"'{wanted}'"
    else:
        return load_driver(wanted, bench.path.parent, problems)
    problems.add(
        id="unknown-driver",
        file=bench.path,
        key=f"instrument.{name}.driver",
        expected=expected,
        found=found,
    )
    return None
