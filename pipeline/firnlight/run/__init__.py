"""What to do, in what order, and whether it is done."""
