"""The optimizer: what a pattern is worth, and the search for a better one."""
