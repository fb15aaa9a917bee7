"""Peak gains of units whose controller samples, computes for a while and holds (theory section 6)."""
