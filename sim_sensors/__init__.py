"""A simulated plate with its own physics, for demonstrations and tests."""
