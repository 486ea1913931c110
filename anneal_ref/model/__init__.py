"""What gets solved: lattices, disorder, instances, schedules, anneals."""
