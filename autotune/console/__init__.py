"""The page: a process of its own that knows nothing but the daemon's local API."""
