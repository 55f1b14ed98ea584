"""Settings of a wrong type or size: each one is refused in one sentence."""

from datetime import datetime

import numpy as np
import pytest

from fastsmooth import Band, InputError, Reading, Smoothing

NAN, INF = float("nan"), float("inf")
CASES = [
    (Reading, "range", (0,), "--range must hold the lowest and the highest x, but it is (0,); "
     "give two values."),
    (Reading, "range", "12", "--range must hold the lowest and the highest x, but it is '12'; "
     "give two values."),
    (Reading, "range", 5, "--range must hold the lowest and the highest x, but it is 5; "
     "give two values."),
    (Reading, "threads", "2", "--threads must be a whole number, 1 or more, but it is '2'; "
     "leave it out."),
    (Reading, "threads", True, "--threads must be a whole number, 1 or more, but it is True; "
     "leave it out."),
    (Reading, "folds", 32.0, "--folds must be a whole number between 2 and 1,024, but it is 32.0; "
     "leave it out."),
    (Reading, "block", 5, "--block must name a column, with or without a unit, but it is 5; "
     "leave it out."),
    (Reading, "where", 5, "--where must be an SQL condition, but it is 5; leave it out."),
    (Reading, "strict", "no", "--strict must be True or False, but it is 'no'; leave it out."),
    (Reading, "scale", None, "--scale must be one of linear, log, but it is None; use one of "
     "'linear', 'log'."),
    (Smoothing, "widths", 48.5, "--widths must be a whole number between 8 and 1,000, but it is "
     "48.5; leave it out."),
    (Smoothing, "kernel", None, "--kernel must be one of biweight, epanechnikov, uniform, "
     "triangular, triweight, tricube, gaussian, but it is None; use one of 'biweight', "
     "'epanechnikov', 'uniform', 'triangular', 'triweight', 'tricube', 'gaussian'."),
    (Smoothing, "criterion", ["gcv"], "--criterion must be one of leave-one-out, leave-block-out, "
     "gcv, aicc, plug-in, but it is ['gcv']; use 'gcv'."),
    (Band, "at", "12", "--at must hold points, one by one, but it is '12'; put it in a tuple."),
    (Band, "at", b"12", "--at must hold points, one by one, but it is b'12'; put it in a tuple."),
    (Band, "at", 5.0, "--at must hold points, one by one, but it is 5.0; put it in a tuple."),
    (Band, "at", np.array(5.0), "--at must hold points, one by one, but it is array(5.); put it "
     "in a tuple."),
    (Band, "at", datetime(2026, 1, 1), "--at must hold points, one by one, but it is "
     "datetime.datetime(2026, 1, 1, 0, 0); put it in a tuple."),
    (Band, "crossings", 20.0, "--crossing must hold values of y, but it is 20.0; put it in a "
     "tuple."),
    (Band, "crossings", ("a",), "--crossing must be a finite number, but it is 'a'; leave it out."),
    (Band, "crossings", (1.0, NAN), "--crossing must be a finite number, but it is nan; leave it "
     "out."),
    (Band, "crossings", (INF,), "--crossing must be a finite number, but it is inf; leave it out."),
    (Band, "level", "0.9", "--level must lie between 0 and 1, but it is '0.9'; write 0.95 for 95 "
     "percent."),
    (Band, "level", NAN, "--level must lie between 0 and 1, but it is nan; write 0.95 for 95 "
     "percent."),
    (Band, "points", 10.5, "--points must be a whole number between 2 and 1,000,000, but it is "
     "10.5; leave it out."),
    (Band, "least_rows", INF, "--least-rows must be a finite number, 0 or more, but it is inf; "
     "leave it out."),
    (Band, "landmarks", "no", "--landmarks must be True or False, but it is 'no'; leave it out."),
]  # fmt: skip


@pytest.mark.parametrize(
    ("group", "name", "value", "text"), CASES, ids=[f"{one[1]}-{one[2]!r}" for one in CASES]
)
def test_wrong_values_are_refused_in_one_sentence(group, name, value, text):
    with pytest.raises(InputError) as caught:
        group(**{name: value})
    assert str(caught.value) == text


def test_numbers_of_other_libraries_become_plain():
    """Settings go into the trace, which is written as JSON."""
    reading = Reading(folds=np.int16(8), threads=np.uint8(1), range=np.array([0.0, 1.0]))
    assert (type(reading.folds), type(reading.threads), type(reading.range)) == (int, int, tuple)
    band = Band(level=np.float64(0.9), crossings=[np.float64(20.0), 3], at=np.arange(3.0))
    assert (band.level, band.crossings, band.at) == (0.9, (20.0, 3.0), (0.0, 1.0, 2.0))
    assert {type(one) for one in (band.level, *band.crossings)} == {float}
    assert type(Smoothing(widths=np.int64(12)).widths) is int
