"""What is issued: one builder per document kind, drawing, plots, PDF."""
