"""Benchmarks: alternatives side by side in one run, ratios printed. ``python -m bench`` runs them all."""
