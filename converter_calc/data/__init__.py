"""Data files and their loader."""
