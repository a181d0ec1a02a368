"""The store: figures, roll-ups, runs, baselines, alarms and events, in SQLite or PostgreSQL."""
