"""tieline: partition coefficients with honest intervals, from raw spot tables.

    import tieline
    run = tieline.reduce("configs/ember.toml")      # or tieline.open_run("example_runs/ember")
    run.table("classify")                           # a data frame; units in .attrs["units"]

What stands in `__all__` is the whole public interface. Nothing heavy is imported before it is used.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

__version__ = "0.1.0"
__all__ = ["InputError", "Run", "__version__", "open_run", "reduce"]

if TYPE_CHECKING:
    from tieline.api import Run, open_run, reduce
    from tieline.errors import InputError


def __getattr__(name: str) -> Any:
    if name in ("Run", "open_run", "reduce"):
        from tieline import api

        return getattr(api, name)
    if name == "InputError":
        from tieline.errors import InputError

        return InputError
    raise AttributeError(f"module 'tieline' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
