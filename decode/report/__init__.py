"""Records to screens and files: the only room that knows a screen."""
