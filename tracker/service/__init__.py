"""The live shell: sockets, journal and clock around the engine."""
