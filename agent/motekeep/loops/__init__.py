"""Move data between edges. Loops share the journal and two events, nothing else."""
