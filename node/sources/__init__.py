"""Where images come from: one small class each behind one protocol."""
