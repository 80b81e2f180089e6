"""Rows from files and frames to grids: calendar, stamps, compact rows, blocks of series."""
