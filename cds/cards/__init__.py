"""Findings -> cards: wording, folding, order. Pure: no file, clock, JSON or FHIR."""
