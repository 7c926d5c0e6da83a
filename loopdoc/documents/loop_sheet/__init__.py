"""The loop sheet: one page with the drawn loop and its data."""
