"""The sounding plan: what is sounded next, and how many of the frames."""
