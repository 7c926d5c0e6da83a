"""loopdoc: a loop register as text, checked, calculated and issued as documents."""

__version__ = "0.1.0"
