"""From a config to stored tiles: plan, tile task, run; the only rooms that know dask."""
