"""The fuller calculations that judge the reduced formulas."""
