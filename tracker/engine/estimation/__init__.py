"""From frames to a channel estimate: basis over tones and elements, noise, prior, least squares, shrinkage."""
