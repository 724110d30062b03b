"""Records for tests, made through the same services that people use."""
