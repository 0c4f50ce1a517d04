"""Heart-failure decision support over FHIR R4: bundles in, recommendation cards out."""

__version__ = "0.1.0"
