"""ohmward tests trays of passive components from one written sequence.

``open_run`` reads a run's tables; everything that the commands do is in ``ohmward.api``. Nothing
heavy is imported before it is used.

    import ohmward

    run = ohmward.open_run("film-run")
    run.results[["part_id", "quantity", "value", "u_expanded", "decision"]]
"""

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"

if TYPE_CHECKING:
    from ohmward.api import open_run

__all__ = ["__version__", "open_run"]


def __getattr__(name: str) -> Any:
    if name != "open_run":
        raise AttributeError(f"module 'ohmward' has no attribute {name!r}")
    from ohmward import api

    return api.open_run
