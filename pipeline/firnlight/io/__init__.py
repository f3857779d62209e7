"""Files in, files out: no formulas."""
