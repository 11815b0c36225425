"""Grids: results and typed values kept in the store, recomputed when what they rest on changes."""
