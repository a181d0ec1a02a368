"""The views that the pages draw, and the shift report."""
