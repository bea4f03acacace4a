"""One outside thing a file; `ports` holds the interfaces that loops know."""
