"""The virtual cell: two cameras over a bench, rendered with known truth."""
