"""Fuzzing scripts: long random runs, apart from the tests."""
