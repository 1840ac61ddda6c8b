"""rigtally: do the bench and the lumped model tally?

>>> import rigtally as rt                                          # doctest: +SKIP
>>> record = rt.read("log.csv")                                    # doctest: +SKIP
>>> fit = rt.fit(record, inputs="p_line", outputs="p_gauge")       # doctest: +SKIP
>>> tally = rt.tally(fit, rt.predict(rt.load_rig("rig.toml")))     # doctest: +SKIP
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from rigtally.estimation.fit import fit as fit
    from rigtally.estimation.measured_response import response as response
    from rigtally.physics.prediction import predict as predict
    from rigtally.physics.rig_file import load_rig as load_rig
    from rigtally.planning.plan import plan as plan
    from rigtally.rating.correction import correct as correct
    from rigtally.rating.rating import rate as rate
    from rigtally.records.read import read as read
    from rigtally.reporting.page import report as report
    from rigtally.tallying.tally import tally as tally

__version__ = "0.1.0"

# public name: (module, name in it); nothing is imported before it is asked for
_PUBLIC = {
    "RigtallyError": ("rigtally.errors", "RigtallyError"),
    "Uncertain": ("rigtally.quantities.uncertain", "Uncertain"),
    "fit": ("rigtally.estimation.fit", "fit"),
    "load_rig": ("rigtally.physics.rig_file", "load_rig"),
    "predict": ("rigtally.physics.prediction", "predict"),
    "read": ("rigtally.records.read", "read"),
    "report": ("rigtally.reporting.page", "report"),
    "plan": ("rigtally.planning.plan", "plan"),
    "rate": ("rigtally.rating.rating", "rate"),
    "correct": ("rigtally.rating.correction", "correct"),
    "response": ("rigtally.estimation.measured_response", "response"),
    "tally": ("rigtally.tallying.tally", "tally"),
}

__all__ = [*_PUBLIC, "__version__"]  # noqa: PLE0604, RUF100


def __getattr__(name: str) -> Any:
    if name in _PUBLIC:
        module, attribute = _PUBLIC[name]
        return getattr(import_module(module), attribute)
    raise AttributeError(f"module 'rigtally' has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted(__all__)
