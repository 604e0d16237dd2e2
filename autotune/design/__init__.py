"""From what is known of a loop to settings: published rules and proposals.  Pure (numpy, scipy)."""
