"""Verification: published cases as data, and the runner that tries them on this installation."""
