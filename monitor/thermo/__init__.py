"""Water and steam, ice, the dead state, exergy and fuels: pure functions on arrays, in SI."""
