"""Programs to start from: each is whole, small, and meant to be copied and changed."""
