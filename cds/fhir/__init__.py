"""FHIR R4 at the edge: resources in, a clean record and its issues out; proposals in, draft resources out."""
