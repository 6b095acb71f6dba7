"""`fhirgallop token`: a new administrators' token, and what the settings keep of it."""

from __future__ import annotations

import hashlib
import secrets

import typer


def command() -> None:
    """Make an administrators' token. Only its SHA-256 goes into the settings; keep the token elsewhere.

    It opens what operators and informaticians use: `Authorization: Bearer TOKEN`, or the page /sign-in.
    """
    token = secrets.token_urlsafe(32)
    typer.echo(f"token (shown once): {token}")
    typer.echo(f"FHIRGALLOP_ADMIN_TOKEN={hashlib.sha256(token.encode('ascii')).hexdigest()}")
