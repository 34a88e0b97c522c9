"""The pure part: bursts and times in, events out.

No socket, file, clock, thread or random source lives here; the live service, the replay and the tests
drive the same code, and the same input gives the same output bit by bit.
"""
