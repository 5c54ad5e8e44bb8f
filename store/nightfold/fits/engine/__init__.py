"""The fit engine: pure functions of arrays, many data sets at once."""
