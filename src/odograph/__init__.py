"""odograph: what the neurons of a foraging animal encode, with the course of every number on record."""

__version__ = "0.1.0"
