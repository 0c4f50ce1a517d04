"""The medicine: frozen records in, findings out. No file, clock, JSON, FHIR or log in here."""
