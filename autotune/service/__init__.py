"""Tasks and time.  It owns them and decides nothing: the pure rooms decide."""
