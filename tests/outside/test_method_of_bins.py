"""The method of bins as a special case: means over half-unit bins of x.

IEC 61400-12-1 (power performance of wind turbines, section on the method of bins) averages power in
bins of 0.5 m/s centred on multiples of 0.5 m/s; its category A uncertainty of a bin is s / sqrt(N).
A uniform window of half a bin to either side, read at the bins' centres, is that average. (Value of
the bin width from memory of the standard; the data are a made-up power curve.)
"""

import numpy as np
import pytest

from fastsmooth import Band, Smoothing, make_curve

WIDTH = 0.5


@pytest.mark.parametrize("engine", ["exact", "binned"])
def test_a_uniform_window_at_bin_centres_is_the_mean_of_the_bin(engine):
    rng = np.random.default_rng(12)
    speed = np.clip(9.0 * rng.weibull(2.0, 40_000), 0.6, 21.9)
    power = 2000.0 / (1.0 + np.exp(-(speed - 8.5))) + rng.normal(0.0, 60.0, speed.size)
    centres = np.arange(2.0, 16.1, WIDTH)
    made = make_curve(
        (speed, power), "x", "y",
        smoothing=Smoothing(
            engine=engine, kernel="uniform", estimator="local-constant", bandwidth=WIDTH / 2.0
        ),
        band=Band(at=tuple(centres), bias="ignored"),
    )  # fmt: skip
    number = np.round(speed / WIDTH).astype(int)
    for place, centre in enumerate(centres):
        own = power[number == round(centre / WIDTH)]
        uncertainty = own.std(ddof=1) / np.sqrt(own.size)
        # From bins, rows of the two bins of the table at the window's ends count in part.
        close = 1e-9 if engine == "exact" else 0.05 * uncertainty
        assert made.estimate[place] == pytest.approx(own.mean(), abs=max(close, 1e-7))
        assert made.effective_rows[place] == pytest.approx(
            own.size, rel=1e-9 if engine == "exact" else 0.01
        )
        if engine == "exact":
            # Scatter within a bin holds the curve's own climb through it; noise along x does not.
            assert made.std_error[place] < 1.1 * uncertainty
