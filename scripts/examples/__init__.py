"""Short scripts to start from; each runs with ``python -m steelyard.scripts.examples.NAME``."""
