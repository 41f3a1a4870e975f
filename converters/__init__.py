"""Converters: each room turns foreign data into a model, or a model into foreign data, and never touches HDF5."""
