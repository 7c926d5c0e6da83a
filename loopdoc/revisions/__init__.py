"""What changed: the register as it was at another revision."""
