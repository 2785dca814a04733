"""The tests and benchmarks of intplan."""
