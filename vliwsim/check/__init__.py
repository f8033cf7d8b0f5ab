"""Legality without input: every rule of the machine on every path of a program, and what cannot be decided."""
