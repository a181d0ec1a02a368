"""The commands, a file a group: parse, call, print. `monitor.cli` puts them together."""
