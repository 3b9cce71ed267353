"""The public Python of ohmward: what the commands call, and any program may."""

from ohmward.api.converting import Converted, convert
from ohmward.api.preparing import Prepared, prepare
from ohmward.api.running import Outcome, dry_run, resume, run
from ohmward.api.schemas import schema
from ohmward.api.serving import serve
from ohmward.api.showing import as_json, show_brief, show_run

__all__ = [
    "Converted",
    "Outcome",
    "Prepared",
    "as_json",
    "convert",
    "dry_run",
    "prepare",
    "resume",
    "run",
    "schema",
    "serve",
    "show_brief",
    "show_run",
]
