"""Values on another scale."""
