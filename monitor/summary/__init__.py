"""The monthly performance summary: one table of results, made once and written in several forms."""
