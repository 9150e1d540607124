"""Tests of the tables: what is stored comes back as it was, and what must not be stored is refused."""
