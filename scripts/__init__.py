"""The command line of steelyard."""
