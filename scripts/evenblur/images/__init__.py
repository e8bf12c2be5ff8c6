"""Image files: the only place that knows about headers, affines, units and hashes of files."""
