"""A filtering stage for scheduled data pipelines: chunked recordings, exact results."""
