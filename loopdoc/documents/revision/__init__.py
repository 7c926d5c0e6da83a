"""What a revision changes, told in documents: bars, the revision summary, the check report."""
