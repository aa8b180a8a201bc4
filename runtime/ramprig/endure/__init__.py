"""Endurance: cycles, wear and drift, life."""
