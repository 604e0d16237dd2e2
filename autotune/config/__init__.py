"""TOML to the frozen plain types of the pure rooms; every complaint names file, key and remedy."""
