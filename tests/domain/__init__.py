"""Tests of the room they are named after."""
