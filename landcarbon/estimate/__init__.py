"""Design-based estimates of carbon stocks and of their change."""
