"""The revisions; each is frozen once released and imports nothing of the store."""
