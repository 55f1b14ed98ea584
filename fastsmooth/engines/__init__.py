"""The bin table made by other engines: Dask, Spark, or anything that speaks SQL.

Every engine adds the rows of its own data up to the sums of one `Plan` and gives back a `BinTable`.
Tables of one plan are equal but for the order in which sums were added (1e-12 of the size of their
terms), so the curves made of them are the same. What differs is which fold a row goes to when the
plan names no block: a run is so many consecutive rows of a task (here and with Dask), of a
partition (Spark), or of the table's row numbers (SQL). With a block all engines deal alike.
"""
