"""Tell people and other programs about alarms and failed jobs, without holding up the figures."""
