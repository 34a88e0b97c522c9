"""The pictures of the README and what makes them."""
