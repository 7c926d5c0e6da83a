"""The site: every document as a page that opens from disk, cross-linked and searchable."""
