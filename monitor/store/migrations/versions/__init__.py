"""One module a schema revision; a published one is never changed."""
