"""Classical scores of tuning: rate maps and information."""
