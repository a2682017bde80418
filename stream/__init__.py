"""turntally: raw GPS probe archives into junction-delay samples by maneuver class."""

__version__ = "0.1.0"
