"""What is written: text with positions, quantities and units, schema, model, tags."""
