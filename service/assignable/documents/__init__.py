"""Limits documents and carries: what a caller keeps and sends back, and how an edit of it shows."""
