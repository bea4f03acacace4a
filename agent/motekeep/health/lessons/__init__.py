"""The lessons: what is learnt of a unit in its first days, one file each."""
