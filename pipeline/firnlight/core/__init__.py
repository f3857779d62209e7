"""The nouns of the job: grids, layers, settings, totals, dates, errors."""
