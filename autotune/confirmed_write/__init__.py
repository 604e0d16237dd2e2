"""The write of settings as a second small machine; it knows only ``loop``.  Pure."""
