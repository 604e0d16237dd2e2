"""Supervised relay-feedback tuning of PID loops that live in PLCs."""
