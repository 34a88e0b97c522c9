"""Element health: which elements do not follow their bits."""
