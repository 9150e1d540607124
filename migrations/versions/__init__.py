"""One file a revision, in order of their numbers; a revision that has left the house is never edited."""
