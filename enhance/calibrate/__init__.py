"""How the two sensors relate: clock, contrast thresholds, hot pixels."""
