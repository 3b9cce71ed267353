"""Makes the report of a run's folder, and keeps the manifest true to it."""

from pathlib import Path

from ohmward.journal.store import JournalUnusable, Store
from ohmward.output import manifest, report
from ohmward.output.record import RunUnreadable
from ohmward.run.folder import JOURNAL


def write_report(folder: Path) -> Path:
    """Write report.html into a run's folder from its tables, and renew the manifest.

    Raises RunUnreadable, naming what is wrong; then nothing is written.
    """
    try:
        store = Store.read(folder / JOURNAL)
    except JournalUnusable as error:
        raise RunUnreadable(str(error)) from error
    try:
        facts, instruments = store.facts(), store.instruments()
    finally:
        store.abandon()
    path = report.write(folder, facts, instruments)
    manifest.write(folder, {key: facts[key] for key in ("run_id", "ohmward", "brief_sha256")})
    return path
