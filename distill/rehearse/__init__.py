"""Closed-loop search with a simulator: record belief trees, compare ways to choose rollouts."""
