"""NWB files to plain arrays and digests; the only package that reads recordings."""
