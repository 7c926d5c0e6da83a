"""Document templates, found as package data."""
