"""Drift: what is watched, the tests, telling changes apart, and what is done about them."""
