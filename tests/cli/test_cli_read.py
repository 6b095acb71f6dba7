"""`fhirgallop read`."""

from __future__ import annotations

from typing import Any

SYSTOLIC = (
    "  Systolic murmur: present (Loudness grade: 3/6; Site where heard or felt: Mitral area (apex)) "
    '[murmur.systolic]  <- "3/6 systolic murmur at apex"'
)


def test_a_line_is_shown_with_its_findings(call: Any) -> None:
    done = call("read", "no S3, 3/6 systolic murmur at apex")
    assert done.code == 0
    assert done.out.decode().splitlines() == [
        "no S3, 3/6 systolic murmur at apex",
        "~~~~~  ~~~~~~~~~~~~~~~~~~~~~~~~~~~",
        '  Third heart sound: absent [heart-sound.s3]  <- "no S3"',
        SYSTOLIC,
    ]


def test_what_was_not_read_is_told_and_ends_with_one(call: Any) -> None:
    done = call("read", "h/o AF, no S3, S4, zebra")
    assert done.code == 1
    assert '  said of the past, not of today: "h/o AF"' in done.out.decode()
    assert '  not understood: "zebra"' in done.out.decode()
    assert "Fourth heart sound: uncertain" in done.out.decode()
    assert "[phrase-scope-doubtful]" in done.err


def test_another_language_is_a_file(call: Any) -> None:
    assert "Third heart sound: absent" in call("read", "kein S3", "--language", "de").out.decode()
    missing = call("read", "S3", "--language", "xx")
    assert missing.code == 4
    assert "xx" in missing.err
