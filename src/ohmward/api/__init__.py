"""The public Python of ohmward: what the commands call, and any program may."""

from ohmward.api.budgeting import budget
from ohmward.api.checking import check_bench, exercise_driver, read_driver, try_address
from ohmward.api.compensating import compensate
from ohmward.api.converting import Converted, convert
from ohmward.api.exporting import export
from ohmward.api.judging import judge_again
from ohmward.api.opening import Run, open_run
from ohmward.api.preparing import Prepared, prepare
from ohmward.api.reporting import write_report
from ohmward.api.running import Outcome, dry_run, resume, run
from ohmward.api.schemas import schema
from ohmward.api.serving import serve
from ohmward.api.showing import (
    as_json,
    show_bench,
    show_brief,
    show_budget,
    show_commands,
    show_compensation,
    show_exercise,
    show_judged_again,
    show_run,
)
from ohmward.api.verifying import Verified, verify

__all__ = [
    "Converted",
    "Outcome",
    "Prepared",
    "Run",
    "Verified",
    "as_json",
    "budget",
    "check_bench",
    "compensate",
    "convert",
    "dry_run",
    "exercise_driver",
    "export",
    "judge_again",
    "open_run",
    "prepare",
    "read_driver",
    "resume",
    "run",
    "schema",
    "serve",
    "show_bench",
    "show_brief",
    "show_budget",
    "show_commands",
    "show_compensation",
    "show_exercise",
    "show_judged_again",
    "show_run",
    "try_address",
    "verify",
    "write_report",
]
