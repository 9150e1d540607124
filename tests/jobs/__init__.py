"""Tests of the schedule and of the lease that says which process works."""
