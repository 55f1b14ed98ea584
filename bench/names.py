"""The columns of the benchmark data; apart from the rest, so that a fresh process stays bare."""

X, Y = "wet_bulb_c", "power_kw"
