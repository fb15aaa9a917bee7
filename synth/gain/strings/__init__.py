"""One-way strings that see only gaps: hop gains, mean-square gains and dead times (theory (27))."""
