"""The offline shell: the same engine over recorded logs."""
