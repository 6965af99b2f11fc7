"""From a cutter path in part coordinates to program words, and the time they take."""
