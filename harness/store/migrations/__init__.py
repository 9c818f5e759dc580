"""How the store's tables came about, revision by revision."""
