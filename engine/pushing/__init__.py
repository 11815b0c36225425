"""Writing grids to remembered databases: the only thing of ours that ever writes to a source."""
