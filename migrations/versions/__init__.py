"""One file a revision of the schema."""
