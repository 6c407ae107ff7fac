"""Troubleshooting as an abstract problem, its exact solution and a time-bounded search."""
