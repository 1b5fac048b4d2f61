"""Shared by all tests; standing here, it also puts this folder (with contracts.py) on the import path."""
