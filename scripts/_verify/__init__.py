"""Sections of verify.py; they run in the environment, with the folder `tests` on the path."""
