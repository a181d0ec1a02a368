"""What the site file says: models, units, the shift calendar, and one loaded site."""
