"""Simulated rigs with known truth; physics only, never the phase equation."""
