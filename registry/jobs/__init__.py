"""Knows when: the schedule, the lease that says which process works, and the pass over the fleet."""
