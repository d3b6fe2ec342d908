"""Digests, records, planning, the store of fits, trace."""
