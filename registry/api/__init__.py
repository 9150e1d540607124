"""HTTP for machines: paths, keys, statuses, JSON fields. Handlers read, call a procedure, write; no rule and no SQL."""
