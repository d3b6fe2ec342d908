"""What changed between two runs of a study, and which conclusions followed."""
