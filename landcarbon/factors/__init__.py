"""Default factor tables as data, and the look-ups into them."""
