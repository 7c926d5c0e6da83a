"""JSON Schema of the register, found as package data."""
