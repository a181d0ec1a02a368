"""Whether a machine is getting worse: baselines, control charts, verdicts and alarms."""
