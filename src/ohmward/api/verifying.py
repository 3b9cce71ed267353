"""Verifies a run's folder: every file against the manifest, every table against the journal."""

import json
import tempfile
from dataclasses import dataclass
from pathlib import Path

from ohmward.api.past_run import PastRun, past_run
from ohmward.api.tabulating import write_events
from ohmward.api.under_voltage import of_sweeps, with_direct
from ohmward.errors import OhmwardError
from ohmward.output import columns, manifest
from ohmward.output.record import RunUnreadable
from ohmward.output.tables import TableWriter
from ohmward.results.judge import judge

MADE_AGAIN = (columns.IMPEDANCE, columns.RESULTS, columns.EVENTS)


@dataclass(frozen=True, kw_only=True, slots=True)
class Verified:
    """What verification found; the folder is as it was left when ``sound``."""

    files: int
    changed: tuple[str, ...]
    missing: tuple[str, ...]
    added: tuple[str, ...]
    differing: tuple[str, ...]
    unreadable: str = ""

    @property
    def sound(self) -> bool:
        """Nothing changed, missing, added or different."""
        found = (self.changed, self.missing, self.added, self.differing)
        return not any(found) and not self.unreadable

    def lines(self) -> list[str]:
        """What was found, as a person reads it."""
        said = [f"changed since the run: {name}" for name in self.changed]
        said += [f"missing: {name}" for name in self.missing]
        said += [f"not of this run: {name}" for name in self.added]
        said += [f"not what the journal gives: {name}" for name in self.differing]
        if self.unreadable:
            said.append(f"the tables could not be made again: {self.unreadable}")
        if self.sound:
            said.append(f"sound: {self.files} files as the run left them, tables as derived anew")
        return said


def verify(folder: Path) -> Verified:
    """Check a run's folder; nothing in it is written.

    Raises RunUnreadable where there is no manifest to check against.
    """
    path = folder / manifest.FILE
    try:
        kept = json.loads(path.read_text("utf-8"))
        listed = {name: one["sha256"] for name, one in kept["files"].items()}
    except OSError as error:
        raise RunUnreadable(f"{path}: {error.strerror}; this folder cannot be verified") from error
    except (ValueError, KeyError, TypeError) as error:
        raise RunUnreadable(f"{path} is no manifest; this folder cannot be verified") from error
    there = {
        file.relative_to(folder).as_posix(): file
        for file in folder.rglob("*")
        if file.is_file() and file != path
    }
    differing: tuple[str, ...] = ()
    unreadable = ""
    try:
        differing = _differing(folder)
    except OhmwardError as error:
        unreadable = str(error)
    return Verified(
        files=len(listed),
        changed=tuple(
            name
            for name, digest in sorted(listed.items())
            if name in there and manifest.sha256(there[name]) != digest
        ),
        missing=tuple(sorted(set(listed) - set(there))),
        added=tuple(sorted(set(there) - set(listed))),
        differing=differing,
        unreadable=unreadable,
    )


def _differing(folder: Path) -> tuple[str, ...]:
    """The tables that are not, byte for byte, what the journal and the kept inputs give."""
    past = past_run(folder)
    with tempfile.TemporaryDirectory() as name:
        again = Path(name)
        _tables_again(past, again)
        return tuple(
            table.file
            for table in (*MADE_AGAIN, *((columns.LEAKAGE,) if past.direct else ()))
            if not (folder / table.file).is_file()
            or (folder / table.file).read_bytes() != (again / table.file).read_bytes()
        )


def _tables_again(past: PastRun, out: Path) -> None:
    with TableWriter(out, columns.IMPEDANCE) as table:
        table.arrays(past.impedance)
    results = judge(
        past.readings,
        past.impedance,
        past.parts,
        of_sweeps(past.limits),
        rule=past.rule,
        closures=past.closures,
        accuracies=past.accuracies,
        cable_m=past.cable_m,
        run_id=past.run_id,
    )
    if past.direct is not None:
        with TableWriter(out, columns.LEAKAGE) as table:
            table.arrays(past.direct.rows)
    results = with_direct(results, past.direct, past.limits, past.parts, past.run_id)
    with TableWriter(out, columns.RESULTS) as table:
        table.rows(results)
    write_events(out, past.run_id, past.events)
