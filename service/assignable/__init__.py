"""Assignable: the statistics of process control as a stateless HTTP service."""
