"""The exergy account of steam systems: from readings to figures, drift, alarms and reports."""
