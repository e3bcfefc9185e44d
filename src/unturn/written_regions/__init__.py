"""Named regions as TOML files define them: what one is made of, and which cells of a step belong to it."""
