"""The loop check record: what to apply, what should happen, room for what is found."""
