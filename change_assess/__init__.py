"""Area of land change with confidence intervals, and map accuracy, from a probability sample.

The steps in order, each a function with the same name as its command:

1. `tally`      count from-to transitions and areas of two or more maps
2. `stratify`   turn change classes into a stratum raster and table
3. `draw`       draw a probability sample
4. `reconcile`  merge returned labels into one reference label per unit and date
5. `estimate`   areas and accuracies with standard errors and intervals

`read_sample` (or `read_matrix`) checks the tables and states the design; `estimate` gives a `Result`:

    import change_assess as ca
    sample = ca.read_sample("sample.csv", strata="strata.csv")
    result = ca.estimate(sample, map="map", reference="ref")
    result.table
    loss = result["forest loss"].area_ha
    loss.interval(0.90); (loss / result.total_area_ha); result.measure(my_function)

Names are loaded when they are first used, so importing the package costs nothing.
"""

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from change_assess.engine.estimate import Estimate, covariance
    from change_assess.engine.intervals import Interval
    from change_assess.errors import ChangeAssessError, DesignError, FileError, InputError
    from change_assess.first_study import start
    from change_assess.labels.reconcile import reconcile
    from change_assess.legend import ChangeClass, ChangeClasses, Legend
    from change_assess.maps.strata import stratify
    from change_assess.maps.tally import tally
    from change_assess.results.estimate import estimate
    from change_assess.results.result import Result
    from change_assess.sample.draw import draw
    from change_assess.samples import Sample, read_matrix, read_sample
    from change_assess.tables import read_legend
    from change_assess.walkthrough import demo

__version__ = "0.1.0"

_HOMES = {
    "change_assess.walkthrough": ["demo"],
    "change_assess.engine.estimate": ["Estimate", "covariance"],
    "change_assess.engine.intervals": ["Interval"],
    "change_assess.errors": ["ChangeAssessError", "DesignError", "FileError", "InputError"],
    "change_assess.labels.reconcile": ["reconcile"],
    "change_assess.legend": ["ChangeClass", "ChangeClasses", "Legend"],
    "change_assess.maps.strata": ["stratify"],
    "change_assess.maps.tally": ["tally"],
    "change_assess.results.estimate": ["estimate"],
    "change_assess.results.result": ["Result"],
    "change_assess.sample.draw": ["draw"],
    "change_assess.first_study": ["start"],
    "change_assess.samples": ["Sample", "read_matrix", "read_sample"],
    "change_assess.tables": ["read_legend"],
}
_HOME_OF = {name: module for module, names in _HOMES.items() for name in names}

__all__ = [
    "ChangeAssessError",
    "ChangeClass",
    "ChangeClasses",
    "DesignError",
    "Estimate",
    "FileError",
    "InputError",
    "Interval",
    "Legend",
    "Result",
    "Sample",
    "covariance",
    "demo",
    "draw",
    "estimate",
    "read_legend",
    "read_matrix",
    "read_sample",
    "reconcile",
    "start",
    "stratify",
    "tally",
]


def __getattr__(name: str) -> Any:
    if name not in _HOME_OF:
        raise AttributeError(f"module 'change_assess' has no attribute '{name}'")
    value = getattr(import_module(_HOME_OF[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
