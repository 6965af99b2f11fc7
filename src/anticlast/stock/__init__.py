"""The stock as it stands through the operations, and what the cutter meets in it."""
