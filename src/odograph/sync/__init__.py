"""Clocks: from the camera's time to the recording's."""
