"""Option formulas: arrays in, arrays out, no dates and no markets."""
