"""What did the user write, in which units, is it sane? TOML to a validated, immutable Material."""
