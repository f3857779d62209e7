"""Numbers with their citations: TOML only, read through core.tables."""
