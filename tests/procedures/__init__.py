"""Tests of the procedures: what a person, a vehicle or the schedule asks, on a real record."""
