"""The rules: one module per kind of question. Each is a total function from a situation to findings."""
