"""From the record of a test to what was seen and what it means, each with its interval.  Pure (numpy, scipy)."""
