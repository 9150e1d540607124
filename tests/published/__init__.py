"""The numerics against published figures and independent programs, each with its source beside it."""
