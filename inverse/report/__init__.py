"""Numbers for people: rounding, tables, propagation of uncertainty."""
