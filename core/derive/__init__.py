"""What follows from structure alone: keys, dependencies, nullability, lineage, null-rejection."""
