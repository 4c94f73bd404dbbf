"""One use case a file: the only room that sees the domain and the store at once."""
