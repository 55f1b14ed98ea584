"""Bin sums against the certified sums of squares of NIST's one-way analyses of variance.

Every treatment lies in a bin of its own, so the sum of squares within treatments is that within
bins. Source: https://www.itl.nist.gov/div898/strd/anova/anova.html; the files are scipy's copies.
"""

from pathlib import Path

import numpy as np
import pytest
import scipy

from fastsmooth import Reading
from fastsmooth.passes import count_rows
from fastsmooth.source import Columns, open_source

FOLDER = Path(scipy.__file__).parent / "stats/tests/data/nist_anova"
# Relative error. From SmLs04 on the limit is the conversion of decimals such as 1000000.4 to
# binary, which alone moves the exact result by as much; from SmLs07 on such as 1000000000000.4.
LARGEST_ERROR = {
    "SiRstv": 1e-12, "AtmWtAg": 2e-11, "SmLs01": 1e-14, "SmLs02": 1e-14, "SmLs03": 1e-14,
    "SmLs04": 6e-11, "SmLs05": 6e-11, "SmLs06": 6e-11, "SmLs07": 6e-5, "SmLs08": 6e-5,
    "SmLs09": 6e-5,
}  # fmt: skip


def read(name):
    lines = (FOLDER / f"{name}.dat").read_text().splitlines()
    within = next(line.split() for line in lines if line.startswith("Within"))
    rows = [line.split() for line in lines[60:] if line.strip()]
    values = np.array([[float(one) for one in row] for row in rows])
    return values[:, 0].copy(), values[:, 1].copy(), int(within[2]), float(within[3])


@pytest.mark.parametrize("name", LARGEST_ERROR)
def test_sum_of_squares_within_treatments(name):
    treatment, response, degrees, certified = read(name)
    if name == "AtmWtAg":
        # Two instruments, numbered 1 and 2 in the file.
        assert set(treatment) == {1.0, 2.0}
    with open_source((treatment, response), Columns("x", "y")) as source:
        table = count_rows(source, Reading(threads=1, folds=4)).table
    sums = table.total()
    used = sums[:, 0] > 0.0
    assert used.sum() == np.unique(treatment).size
    assert sums[:, 0].sum() - used.sum() == degrees
    n, e, e2 = sums[used, 0], sums[used, 3], sums[used, 6]
    within = float(np.sum(e2 - e * e / n))
    assert within == pytest.approx(certified, rel=LARGEST_ERROR[name])


def test_the_limit_is_the_decimals_own():
    """Exact arithmetic on the same floats is as far from the certified value."""
    from fractions import Fraction

    treatment, response, _, certified = read("SmLs07")
    exact = Fraction(0)
    for one in np.unique(treatment):
        values = [Fraction(float(y)) for y in response[treatment == one]]
        mean = sum(values) / len(values)
        exact += sum((y - mean) ** 2 for y in values)
    assert abs(float(exact) / certified - 1.0) > 4e-5
    with open_source((treatment, response), Columns("x", "y")) as source:
        sums = count_rows(source, Reading(threads=1, folds=4)).table.total()
    used = sums[:, 0] > 0.0
    within = np.sum(sums[used, 6] - sums[used, 3] ** 2 / sums[used, 0])
    assert within == pytest.approx(float(exact), rel=1e-6)
