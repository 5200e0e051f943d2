"""Runs: what an inference leaves behind, as one HDF5 file."""
