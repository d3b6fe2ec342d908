"""The odograph command."""
