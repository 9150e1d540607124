"""The numerics against a stepped world, closed forms and their own second way to the same answer."""
