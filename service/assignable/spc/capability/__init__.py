"""Capability: how a process's spread compares with what the specification allows."""
