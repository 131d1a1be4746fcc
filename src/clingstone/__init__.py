"""Which rows of a regression hang together, what that does to its intervals, and what to report.

    import clingstone

    examination = clingstone.examine("trial.csv", model="pressure ~ arm + age", group="clinic")
    print(examination)
    examination.save("trial-clingstone")

Names are resolved on first use, so that ``import clingstone`` loads nothing heavy.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from clingstone.case import Case as Case
    from clingstone.examination import Examination as Examination
    from clingstone.examination import examine as examine
    from clingstone.examination import refit as refit
    from clingstone.examination import replay as replay
    from clingstone.needs import InputError as InputError
    from clingstone.needs import Limits as Limits
    from clingstone.needs import NotSupported as NotSupported
    from clingstone.parts.verb import examine_parts as examine_parts
    from clingstone.rehearsing import plan as plan
    from clingstone.rehearsing import rehearse as rehearse
    from clingstone.results import Results as Results
    from clingstone.run import Settings as Settings

__version__ = "0.1.0"

_HOMES = {
    "Case": "case",
    "Examination": "examination",
    "examine": "examination",
    "examine_parts": "parts.verb",
    "refit": "examination",
    "plan": "rehearsing",
    "rehearse": "rehearsing",
    "replay": "examination",
    "InputError": "needs",
    "Limits": "needs",
    "NotSupported": "needs",
    "Results": "results",
    "Settings": "run",
}
__all__ = [
    "Case",
    "Examination",
    "InputError",
    "Limits",
    "NotSupported",
    "Results",
    "Settings",
    "__version__",
    "examine",
    "examine_parts",
    "plan",
    "refit",
    "rehearse",
    "replay",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'clingstone' has no attribute {name!r}")
    value = getattr(import_module(f"clingstone.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted(__all__)
