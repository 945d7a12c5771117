"""Replicates append-only signed logs between nodes and knows nothing of what they say."""
