"""A measurement at sizes so small that a test can take it."""

from fastsmooth.measure.sizes import Sizes

TINY = Sizes(
    copied_bytes=1 << 16,
    files=2,
    rows_per_file=20_000,
    curve_files=(1,),
    accumulated_rows=5_000,
    exact_rows=(2_000, 70_000),
    bandwidth_shares=(0.03, 0.3),
    neighbours=(10, 1),
    search_rows=30_000,
    search_widths=12,
    least_rounds=2,
    least_seconds=0.0,
    patience_seconds=60.0,
)
