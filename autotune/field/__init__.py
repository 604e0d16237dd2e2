"""The wire.  It decides nothing and writes only what the write list holds."""
