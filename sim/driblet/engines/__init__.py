"""Algorithms that advance counts: arrays in, arrays out; no files, no units, no Python objects. See contract.py."""
