"""The record of a test: one immutable sheet, chained to the one before it."""
