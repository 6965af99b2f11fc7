"""Reads a program text back and works out what the machine would do; knows nothing of how it was planned."""
