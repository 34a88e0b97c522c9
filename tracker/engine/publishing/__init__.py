"""When a pattern is worked out and published, and what is promised of it."""
