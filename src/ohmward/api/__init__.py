"""The public Python of ohmward: what the commands call, and any program may.

Each name is imported when it is first used: a conversion waits for no figure and no link.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from ohmward.api.budgeting import budget
    from ohmward.api.checking import check_bench, exercise_driver, read_driver, try_address
    from ohmward.api.compensating import compensate
    from ohmward.api.converting import Converted, convert
    from ohmward.api.exporting import export
    from ohmward.api.judging import judge_again
    from ohmward.api.mishaps import fault_kinds
    from ohmward.api.opening import Run, open_run
    from ohmward.api.plain_json import as_json
    from ohmward.api.preparing import Prepared, prepare
    from ohmward.api.reporting import write_report
    from ohmward.api.running import Outcome, dry_run, resume, run
    from ohmward.api.schemas import schema
    from ohmward.api.serving import serve
    from ohmward.api.showing import (
        show_bench,
        show_brief,
        show_budget,
        show_commands,
        show_compensation,
        show_exercise,
        show_judged_again,
        show_replay,
        show_run,
    )
    from ohmward.api.verifying import Verified, verify

_NAMES_BY_MODULE: dict[str, tuple[str, ...]] = {
    "budgeting": ("budget",),
    "checking": ("check_bench", "exercise_driver", "read_driver", "try_address"),
    "compensating": ("compensate",),
    "converting": ("Converted", "convert"),
    "exporting": ("export",),
    "judging": ("judge_again",),
    "mishaps": ("fault_kinds",),
    "opening": ("Run", "open_run"),
    "plain_json": ("as_json",),
    "preparing": ("Prepared", "prepare"),
    "reporting": ("write_report",),
    "running": ("Outcome", "dry_run", "resume", "run"),
    "schemas": ("schema",),
    "serving": ("serve",),
    "showing": (
        "show_bench",
        "show_brief",
        "show_budget",
        "show_commands",
        "show_compensation",
        "show_exercise",
        "show_judged_again",
        "show_replay",
        "show_run",
    ),
    "verifying": ("Verified", "verify"),
}
_MODULES = {name: module for module, names in _NAMES_BY_MODULE.items() for name in names}

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
    "fault_kinds",
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
    "show_replay",
    "show_run",
    "try_address",
    "verify",
    "write_report",
]


def __getattr__(name: str) -> Any:
    if name not in _MODULES:
        raise AttributeError(f"module 'ohmward.api' has no attribute {name!r}")
    found = getattr(import_module(f"ohmward.api.{_MODULES[name]}"), name)
    globals()[name] = found
    return found
