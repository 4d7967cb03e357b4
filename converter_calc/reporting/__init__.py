"""Sheets, tables, charts and exports of results."""
