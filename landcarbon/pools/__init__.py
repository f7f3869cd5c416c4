"""From field measurements to mass and carbon: one module per pool."""
