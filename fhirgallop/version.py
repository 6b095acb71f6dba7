"""The version of fhirgallop, written once."""

VERSION = "0.1.0"
