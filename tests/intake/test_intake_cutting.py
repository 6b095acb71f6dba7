"""A file cut between its records: the parts together read as the whole does."""

from __future__ import annotations

import io

import pytest
from hypothesis import given
from hypothesis import strategies as st

from fhirgallop.intake.cutting import cuts
from fhirgallop.intake.detect import Kind, open_records
from fhirgallop.intake.limits import Limits
from fhirgallop.intake.midway import START
from fhirgallop.intake.reading import Read
from fhirgallop.intake.record import LocalRecord
from fhirgallop.outcome import Issue, ordered

LIMITS = Limits(record_bytes=400)
NAMES: dict[Kind, str] = {
    "csv": "a.csv",
    "tsv": "a.tsv",
    "ndjson": "a.ndjson",
    "hl7": "a.hl7",
    "json": "a.json",
}


def whole(data: bytes, kind: Kind) -> list[Read]:
    """Read at once."""
    return list(open_records(data, name=NAMES[kind], limits=LIMITS, since=START))


def parts(data: bytes, kind: Kind, each: int) -> list[list[Read]]:
    """Read part by part."""
    places = [START, *cuts(io.BytesIO(data), kind, each, LIMITS)]
    ends = [place.offset for place in places[1:]] + [len(data)]
    return [
        list(open_records(data[place.offset : end], name=NAMES[kind], limits=LIMITS, since=place))
        for place, end in zip(places, ends, strict=True)
    ]


CSV = [
    b'\xef\xbb\xbfid,a,b\r\n1,x,y\r\n2,"one\r\ntwo",z\r\n\r\n3,"q""q",\r\n4,5" heel,w\r\n5,ragged\r\n6,k,l',
    b"sep=;\nid;a\n1;x\n\n2;y\n3;" + b"z" * 500 + b"\n4;w\n5;v\n",
    "id,a\n1,naïve\n2,b\n3,c\n4,déjà\n".encode(),
    "id,a\n1,b\n2,naïve\n3,c\n4,déjà\n5,d\n".encode("cp1252"),
    "id,a\n1,naïve\n".encode() + "2,naïve\n3,b\n".encode("cp1252") + b"4,b\n",
    b'id,a\n1,"bad"quote\n2,b\n3,"open\n4,c\n5,d\n',
    b"id,a,a,\n1,2,3,4\n2,2,3,4\n3,2,3,4\n",
    b"id,a\r1,2\r3,4\r5,6\r",
    b"id,a\n",
    b"",
    b"\n\n",
    b"\xff\xfei\0d\0",
    b"id," + b"n" * 300 + b"\n1,2\n3,4\n",
]
NDJSON = [
    b'{"id":1}\n{"id":2}\r\n\n{"id":3,}\n[{"id":4},{"id":5}]\n' + b"x" * 900 + b'\n{"id":6}',
    b'{"id":1}\r{"id":2}\r{"id":3}\r\n{"id":4}\n\n\n',
    b"",
]
MESSAGE = (
    "MSH|^~\\&|A|B|C|D|20260101||ORU^R01|{0}|P|2.5.1\rPID|1||P{0}\rOBR|1||E{0}|X\rOBX|1|ST|f||v||||||F\r"
)
HL7 = [
    "".join(MESSAGE.format(n) for n in range(5)).encode(),
    ("FHS|^~\\&\rBHS|^~\\&\r" + "".join(MESSAGE.format(n) for n in range(4)) + "BTS|4\rFTS|1\r").encode(),
    ("BHS|^~\\&\r" + "".join("\x0b" + MESSAGE.format(n) + "\x1c\r" for n in range(3)) + "BTS|9\r").encode(),
    b"junk\r" + MESSAGE.format(1).encode() + b"junk\r" + MESSAGE.format(2).encode() + b"Z" * 900 + b"\r",
    b"junk\r",
]
CASES: list[tuple[Kind, bytes]] = [
    *(("csv", data) for data in CSV),
    *(("ndjson", data) for data in NDJSON),
    *(("hl7", data) for data in HL7),
    ("tsv", b"id\ta\n1\tx,y\n2\ty\n3\tz\n"),
]


@pytest.mark.parametrize("each", [1, 2, 3])
@pytest.mark.parametrize(("kind", "data"), CASES)
def test_parts_read_as_the_whole(kind: Kind, data: bytes, each: int) -> None:
    assert [read for part in parts(data, kind, each) for read in part] == whole(data, kind)


def test_each_part_holds_as_many_records_as_was_asked() -> None:
    data = b"id,a\n" + b"".join(b'%d,"x\ny"\n' % number for number in range(10))
    assert [len(part) for part in parts(data, "csv", 4)] == [4, 4, 2]
    assert [len(part) for part in parts(HL7[0], "hl7", 2)] == [2, 2, 1]


def test_what_is_one_text_is_not_cut() -> None:
    assert not list(cuts(io.BytesIO(b'[{"id":1},{"id":2}]'), "json", 1))


PIECES = st.sampled_from(
    [
        b"1",
        b",",
        b";",
        b'"',
        b'""',
        b"\n",
        b"\r\n",
        b"\r",
        b"x",
        "é".encode(),
        b"\xe9",
        b"\0",
        b" ",
        b"y" * 450,
    ]
)


@given(st.lists(PIECES, max_size=40), st.integers(1, 3))
def test_whatever_a_table_holds(pieces: list[bytes], each: int) -> None:
    data = b"id,a\n" + b"".join(pieces)
    together = [read for part in parts(data, "csv", each) for read in part]
    assert said(together) == said(whole(data, "csv"))


def said(reads: list[Read]) -> tuple[list[object], list[Issue]]:
    """Records in order, and all issues: a remark on the whole table goes with whatever record comes next."""
    records = [(read.line, read.fields) for read in reads if isinstance(read, LocalRecord)]
    return list(records), ordered(issue for read in reads for issue in read.issues)
