"""Scores of the named causes on simulated plants with drawn errors, beside other methods."""
