"""Equations that the Newton loop solves, one a file."""
