"""The heat log: reading, checking and writing tables of heats that were made."""
