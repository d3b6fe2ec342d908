"""What a unit encodes: penalised Poisson models of its spike counts."""
