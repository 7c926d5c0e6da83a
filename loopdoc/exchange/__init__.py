"""Other forms of what loopdoc knows: findings as text and as JSON."""
