"""The reference P/PI block, and the port behind which any controller stands."""
