"""The edge of the analysis: captures, tables, run folders and TOML files."""
