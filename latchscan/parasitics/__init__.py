"""Physical coefficients for the fields: resistances of wells and substrate."""
