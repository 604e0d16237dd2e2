"""The sheet as a page that a person reads and signs."""
