"""Sequence files: read into typed steps, compiled to a plan before anything moves, run, and judged."""
