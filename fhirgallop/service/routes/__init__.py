"""Addresses of the service, one file a family."""
