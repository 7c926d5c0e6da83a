"""What leaves the house: the issue of documents, what a file carries inside, the package, and attesting it later."""
