"""File to spans of edges: the only room that knows file layouts."""
