"""How well the inferred field, its band and its alarms agree with simulated truth."""
