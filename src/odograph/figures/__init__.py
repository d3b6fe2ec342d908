"""Every picture, one module per figure family."""
