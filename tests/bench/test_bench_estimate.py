"""Time of estimating from a large sample table, and of starting the program, against named baselines of the same run.

Run with ``pytest -m bench -s tests/bench``. The figures are printed; the assertions only catch a fall back by far.
"""

import subprocess
import sys
import time

import numpy as np
import pandas as pd
import pytest

from change_assess.results.estimate import estimate
from change_assess.samples import read_sample

pytestmark = pytest.mark.bench
UNITS, CLASSES = 200_000, 20


@pytest.fixture(scope="module")
def tables(tmp_path_factory):
    """A sample of 200,000 units of 20 classes, strata = map classes, 15 % of the labels wrong."""
    rng = np.random.default_rng(3)
    names = np.array([f"class {i:02d}" for i in range(CLASSES)])
    mapped = rng.integers(0, CLASSES, UNITS)
    reference = np.where(rng.random(UNITS) < 0.85, mapped, rng.integers(0, CLASSES, UNITS))
    path = tmp_path_factory.mktemp("bench") / "sample.csv"
    unit = [f"u{i:06d}" for i in range(UNITS)]
    frame = {"unit": unit, "stratum": names[mapped], "map": names[mapped], "ref": names[reference]}
    pd.DataFrame(frame).to_csv(path, index=False)
    strata = pd.DataFrame({"stratum": names, "units": 10_000_000 + np.arange(CLASSES), "area_ha": 900_000.0})
    return path, strata


def best(function, times=5):
    """Least CPU time of several calls, in seconds."""
    spent = []
    for _ in range(times):
        start = time.process_time()
        function()
        spent.append(time.process_time() - start)
    return min(spent)


def test_estimating_from_a_large_table(tables):
    """All measures of 200,000 units and 20 classes, beside merely reading the table with pandas."""
    path, strata = tables
    sample = read_sample(path, strata)
    merely = best(lambda: pd.read_csv(path))
    as_text = best(lambda: pd.read_csv(path, dtype=str))
    checked = best(lambda: read_sample(path, strata))
    measures = best(lambda: estimate(sample, map="map", reference="ref"))
    result = estimate(sample, map="map", reference="ref")
    print(
        f"\npandas {pd.__version__}: read_csv {1e3 * merely:.0f} ms, as text {1e3 * as_text:.0f} ms; "
        f"read_sample {1e3 * checked:.0f} ms; estimate {1e3 * measures:.0f} ms for {len(result.table)} rows; "
        f"on top of the read / read_csv {(checked + measures - merely) / merely:.1f}, "
        f"estimate / read as text {measures / as_text:.2f}"
    )
    assert measures < 5 * as_text


def test_starting_the_program():
    """Importing the package and asking for help take little more than importing numpy."""

    def wall(*arguments):
        spent = []
        for _ in range(7):
            start = time.perf_counter()
            subprocess.run([sys.executable, *arguments], check=True, capture_output=True)
            spent.append(time.perf_counter() - start)
        return min(spent)

    bare = wall("-c", "import numpy")
    package, helped = wall("-c", "import change_assess"), wall("-m", "change_assess", "--help")
    print(f"\nimport numpy {bare:.3f} s; import change_assess {package:.3f} s; --help {helped:.3f} s")
    assert package - bare < 0.25
    assert helped - bare < 0.25
