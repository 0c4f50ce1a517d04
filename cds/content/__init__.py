"""The knowledge: reviewed tables as TOML and CSV, and the loaders that alone read them."""
