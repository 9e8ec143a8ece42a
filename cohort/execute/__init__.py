"""Running a study: shards, commits, resume. The only import of dask."""
