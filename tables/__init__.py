"""Published figures as they ship: one folder a set, named for its paper."""
