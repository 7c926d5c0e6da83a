"""Response documents: time responses, open loops over frequency, the tuning review."""
