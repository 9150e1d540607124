"""The tests, a mirror of the rooms: sentences about what the program does, on file databases and a standing clock."""
