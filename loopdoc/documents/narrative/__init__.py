"""The control narrative of a unit: what is said of each scheme, in prose."""
