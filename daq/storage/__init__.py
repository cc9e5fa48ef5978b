"""The archive of a run: the only place that knows Zarr and SQLite."""
