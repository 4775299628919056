"""Models with known answers, for tests, examples and the demo."""
