"""Benchmarks of sordino against the textbook method: `python -m bench` from the project folder."""
