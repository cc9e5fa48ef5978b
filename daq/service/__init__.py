"""Service: the composition root. Loads, wires devices, archive and estimate, carries runs out."""
