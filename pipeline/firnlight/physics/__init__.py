"""Published formulas as functions of arrays: no files, labels, clock or scheduler."""
