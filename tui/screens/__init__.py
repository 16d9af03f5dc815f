"""One file a page; each answers one question."""
