"""Comparison: alignment of orbitals, round trips, member-by-member differences of files.

The comparison of two wave functions as physics belongs here too and will be a module of its own.
"""
