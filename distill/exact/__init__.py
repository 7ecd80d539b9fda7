"""Exact value of computation, one file a method; floor 2."""
