"""Who came from where: descendants, ancestors, flows between labels, features along the way, and their error bars."""
