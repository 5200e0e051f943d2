"""Digest: from a run to words, numbers and figures."""
