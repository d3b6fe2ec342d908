"""All units together: composition, intervals, adaptivity."""
