"""The command line: one module a verb, built from the schema."""
