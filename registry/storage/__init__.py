"""Knows tables. All SQL is here: functions take the connection first, answer frozen domain values, never commit."""
