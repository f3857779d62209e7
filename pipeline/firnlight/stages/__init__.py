"""Named steps of the chain: which layers each needs and makes, and which formulas it calls."""
