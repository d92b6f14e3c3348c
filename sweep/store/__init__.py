"""Atlases on disk: the only rooms that know zarr."""
