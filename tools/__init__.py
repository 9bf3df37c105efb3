"""What people run: the command line, the virtual cell, benchmarks and examples."""
