"""Benchmarks: speed with its circumstances, never as a test."""
