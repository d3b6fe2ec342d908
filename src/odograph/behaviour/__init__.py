"""Tracked points to position, head direction and speed, with an audit of every sample dropped."""
