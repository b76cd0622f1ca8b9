"""Finite elements: data and one method each."""
