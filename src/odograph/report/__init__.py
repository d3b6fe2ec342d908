"""The self-contained page that gathers a run."""
