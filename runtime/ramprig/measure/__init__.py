"""Measuring: procedures that learn about a bench, and the numbers they end in."""
