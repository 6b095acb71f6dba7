"""How long keys are kept, and when they are asked for: row CH-70 (SMART App Launch 2.2, RFC 9111)."""

from __future__ import annotations

import json
import threading
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.delivery.client import Answer, ClientError
from fhirgallop.service.auth.jwt import TokenError, read_token
from fhirgallop.service.auth.keys import Keys, UnreachableError

PLACE = "https://ehr.example/keys"


@dataclass
class Publisher:
    """Stands where the client would ask; counts how often."""

    signers: list[Any]
    cache_control: str | None = None
    status: int = 200
    broken: bool = False
    asked: int = 0
    now: float = 1000.0
    extra: list[Any] = field(default_factory=list)

    def send(self, _method: str, url: str, **_: Any) -> Answer:
        assert url == PLACE
        self.asked += 1
        if self.broken:
            raise ClientError("timed-out")
        headers = {"cache-control": self.cache_control} if self.cache_control is not None else {}
        keys = [signer.public for signer in self.signers] + self.extra
        return Answer(self.status, headers, json.dumps({"keys": keys}).encode())

    def keys(self) -> Keys:
        return Keys(self, lambda: self.now)  # type: ignore[arg-type]


def finds(keys: Keys, signer: Any) -> bool:
    """Whether the key of a signer is found, and is that very key."""
    token = read_token(signer.sign({}), ("ES384", "RS384"))
    try:
        token.verify(keys.find(token, (PLACE,)))
    except TokenError:
        return False
    return True


@pytest.mark.parametrize(
    ("cache_control", "seconds"),
    [
        ("max-age=600", 600),
        ("public, max-age=60", 60),
        ("max-age=999999999", 86_400),
        (None, 300),
        ("public", 300),
        ("max-age=600, no-store", 0),
        ("no-cache", 0),
        ("max-age=0", 0),
        ("max-age=x", 300),
        ("MAX-AGE=60", 60),
    ],
)
def test_ch_70_keys_are_kept_as_long_as_the_place_says(ehr: Any, cache_control: str, seconds: int) -> None:
    place = Publisher([ehr], cache_control)
    keys = place.keys()
    assert finds(keys, ehr)
    if seconds:
        place.now += seconds - 1
        assert finds(keys, ehr)
        assert place.asked == 1
        place.now += 1
    assert finds(keys, ehr)
    assert place.asked == 2


def test_ch_70_a_key_that_was_taken_out_is_good_no_longer_than_that(ehr: Any, new_signer: Any) -> None:
    place = Publisher([ehr], "max-age=60")
    keys = place.keys()
    assert finds(keys, ehr)
    place.signers = [new_signer("ehr-2")]
    place.now += 61
    assert not finds(keys, ehr)


def test_ch_70_an_unknown_key_is_asked_for_once_in_half_a_minute(ehr: Any, new_signer: Any) -> None:
    place = Publisher([ehr], "max-age=3600")
    keys = place.keys()
    assert finds(keys, ehr)
    for n in range(20):
        assert not finds(keys, new_signer(f"guess-{n}"))
    assert place.asked == 2
    newer = new_signer("ehr-2")
    place.signers.append(newer)
    assert not finds(keys, newer)
    place.now += 30
    assert finds(keys, newer)
    assert place.asked == 3
    assert finds(keys, ehr)


def test_a_place_that_fails_is_left_alone_for_a_moment(ehr: Any) -> None:
    place = Publisher([ehr], broken=True)
    keys = place.keys()
    for _ in range(3):
        with pytest.raises(UnreachableError):
            finds(keys, ehr)
    assert place.asked == 1
    place.broken, place.status = False, 500
    place.now += 5
    with pytest.raises(UnreachableError):
        finds(keys, ehr)
    place.status = 200
    place.now += 5
    assert finds(keys, ehr)
    assert place.asked == 3


def test_keys_that_are_there_outlast_a_failure_within_their_time(ehr: Any, new_signer: Any) -> None:
    """A forged kid while the place is down shuts nobody out whose key is known."""
    place = Publisher([ehr], "max-age=600")
    keys = place.keys()
    assert finds(keys, ehr)
    place.broken = True
    with pytest.raises(UnreachableError):
        finds(keys, new_signer("guess"))
    assert finds(keys, ehr)


def test_a_place_that_hangs_holds_up_nobody_whose_key_is_known(ehr: Any, new_signer: Any) -> None:
    """While a forged kid makes one thread wait for the place, the others are served from what is kept."""
    place = Publisher([ehr], "max-age=600")
    keys = place.keys()
    assert finds(keys, ehr)
    begun, go_on = threading.Event(), threading.Event()
    plain = place.send

    def hanging(*words: Any, **named: Any) -> Answer:
        begun.set()
        assert go_on.wait(30)
        return plain(*words, **named)

    place.send = hanging  # type: ignore[method-assign]
    with ThreadPoolExecutor(2) as pool:
        forged = pool.submit(finds, keys, new_signer("guess"))
        assert begun.wait(30)
        assert finds(keys, ehr)
        with pytest.raises(UnreachableError):
            finds(keys, new_signer("another guess"))
        go_on.set()
        assert forged.result(30) is False


@pytest.mark.parametrize(
    "changed",
    [
        {"kid": "other"},
        {"kty": "RSA"},
        {"crv": "P-256"},
        {"use": "enc"},
        {"alg": "ES512"},
        {"key_ops": ["sign"]},
        {"key_ops": "verify"},
        {"x": "AA"},
        {"x": None},
        {"y": 7},
        {"d": "AA"},
        {"kid": None},
    ],
)
def test_keys_that_are_not_for_this(ehr: Any, changed: dict[str, Any]) -> None:
    key = {name: value for name, value in {**ehr.public, **changed}.items() if value is not None}
    assert not finds(Publisher([], extra=[key]).keys(), ehr)
    assert finds(Publisher([], extra=[{**ehr.public, "key_ops": ["verify"]}]).keys(), ehr)


def test_rsa_keys_of_an_unsafe_size(new_signer: Any) -> None:
    """Below 2048 bits (NIST SP 800-131A), or so large that checking is an attack."""
    signer = new_signer("r", "RS384")
    for letters in (170, 2000):
        key = {**signer.public, "n": "x" + "A" * letters}
        assert not finds(Publisher([], extra=[key]).keys(), signer)
    assert finds(Publisher([signer]).keys(), signer)


def test_keys_in_a_file_are_read_again(ehr: Any, new_signer: Any, tmp_path: Path) -> None:
    path, newer = tmp_path / "keys.json", new_signer("ehr-2")
    path.write_text(json.dumps({"keys": [ehr.public]}))
    keys = Publisher([]).keys()

    def found(signer: Any) -> bool:
        token = read_token(signer.sign({}), ("ES384",))
        try:
            keys.find(token, (str(path),))
        except TokenError:
            return False
        return True

    assert found(ehr)
    path.write_text(json.dumps({"keys": [newer.public]}))
    assert found(newer)
    assert not found(ehr)
    path.unlink()
    token, later = read_token(ehr.sign({}), ("ES384",)), Publisher([]).keys()
    with pytest.raises(UnreachableError):
        later.find(token, (str(path),))
