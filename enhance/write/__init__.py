"""Video, stills, tables and records; each file appears whole or not at all."""
