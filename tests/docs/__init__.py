"""The documentation, page by page, and every circuit."""
