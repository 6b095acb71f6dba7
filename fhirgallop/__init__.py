"""fhirgallop: from the clinic's heart-examination form to coded, checked FHIR Observations."""

from __future__ import annotations

__version__ = "0.1.0"

__all__ = ["__version__"]
