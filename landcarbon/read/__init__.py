"""Field files in any of the usual formats, read into canonical tables with fixed names and units."""
