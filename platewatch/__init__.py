"""platewatch: the temperature field of a heated plate, inferred, predicted and recorded."""

__version__ = "0.1.0"
