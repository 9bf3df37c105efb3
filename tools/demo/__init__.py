"""The demonstration: the everyday commands at work on the virtual cell, scored against its truth."""
