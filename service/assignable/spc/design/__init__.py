"""Chart design: how large a sample, how often, and what it buys."""
