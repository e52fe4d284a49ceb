"""Rig and trial files: TOML to validated tables to domain objects; ``load`` is the way in."""
