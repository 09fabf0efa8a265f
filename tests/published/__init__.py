"""Published values (CSV, each row with its source) and the few functions that turn them into scenarios."""
