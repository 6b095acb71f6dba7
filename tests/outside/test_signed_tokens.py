"""Published examples of signed tokens and of PKCE, against what checks ours.

RFC 7515 (JSON Web Signature), appendix A.3, was written from memory: a signature that holds shows that the
memory is right. RFC 7636 (PKCE), appendix B, is as public programs' tests quote it; the
text itself was not read.
"""

from __future__ import annotations

import pytest
from joserfc.jwk import ECKey

from fhirgallop.service.auth.jwt import TokenError, read_token
from fhirgallop.service.auth.openid import challenge_of

# RFC 7515, appendix A.3.1
TOKEN = (
    "eyJhbGciOiJFUzI1NiJ9"
    ".eyJpc3MiOiJqb2UiLA0KICJleHAiOjEzMDA4MTkzODAsDQogImh0dHA6Ly9leGFtcGxlLmNvbS9pc19yb290Ijp0cnVlfQ"
    ".DtEhU3ljbEg8L38VWAfUAqOyKAM6-Xx-F4GawxaepmXFCgfTjDxw5djxLa8ISlSApmWQxfKTUJqPP3-Kg6NU1Q"
)
KEY = {
    "kty": "EC",
    "crv": "P-256",
    "x": "f83OJ3D2xF1Bg8vub9tLe1gHMzV76e8Tus9uPHvRVEU",
    "y": "x_FEzRu9m36HLN_tue659LNpXW6pCyStikYjKIWI5a0",
}


def test_the_example_of_rfc_7515_holds() -> None:
    token = read_token(TOKEN, ("ES256",))
    token.verify(ECKey.import_key(KEY))
    assert dict(token.claims) == {"iss": "joe", "exp": 1300819380, "http://example.com/is_root": True}


@pytest.mark.parametrize("at", [30, 60, 120, 180])
def test_one_letter_changed_and_it_does_not(at: int) -> None:
    changed = TOKEN[:at] + ("A" if TOKEN[at] != "A" else "B") + TOKEN[at + 1 :]
    with pytest.raises(TokenError):
        read_token(changed, ("ES256",)).verify(ECKey.import_key(KEY))


def test_the_example_of_rfc_7636() -> None:
    assert (
        challenge_of("dBjftJeZ4CVP-mB92K27uhbUJU1p1r_wW1gFWFOEjXk")
        == "E9Melhoa2OwvFrEMTJguCHaoeK1t8URWbuGJSstw-cM"
    )
