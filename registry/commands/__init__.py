"""The command line: read arguments, call a procedure, write text or JSON. No rule, no SQL; few commands a module."""
