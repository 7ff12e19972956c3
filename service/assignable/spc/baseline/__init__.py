"""Baseline studies: what a baseline must be looked at for before its limits are trusted."""
