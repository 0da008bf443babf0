"""Solvers of the scheduling problem, their certificates, and rounding to lots."""
