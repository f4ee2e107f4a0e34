"""Drug profiles: one TOML file per drug, and their loader."""
