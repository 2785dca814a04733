"""intplan: plans in whole units, with a proof that nothing beats them.

The names below are loaded when they are first used, so that ``import intplan`` (and with it
``intplan --help``) does not wait for numerical libraries.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from intplan.errors import IntplanError
    from intplan.planning import Clash, Replan, StandingPlan, load_standing, solve
    from intplan.planning.clash import clash
    from intplan.sheet import Sheet

__version__ = "0.1.0"
__all__ = [
    "Clash",
    "IntplanError",
    "Replan",
    "Sheet",
    "StandingPlan",
    "__version__",
    "clash",
    "load_standing",
    "solve",
]

_HOMES = {
    "Clash": "intplan.planning",
    "IntplanError": "intplan.errors",
    "Replan": "intplan.planning",
    "Sheet": "intplan.sheet",
    "StandingPlan": "intplan.planning",
    "clash": "intplan.planning.clash",
    "load_standing": "intplan.planning",
    "solve": "intplan.planning",
}


def __getattr__(name: str) -> Any:
    """Load a public name from its home on first use."""
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module 'intplan' has no attribute {name!r}")
    value = getattr(import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    """List the public names, loaded or not."""
    return sorted(set(globals()) | set(__all__))
