"""Many examinations through `fhirgallop backfill`: memory, rate, processors, against the model library.

The real table beside the checkout, repeated and varied. BENCH_EXAMS=1000000 for the full size (about 3 GB of
packed output in the temporary folder); the ordinary size is 20,000. Spark is measured where it is installed.
"""

from __future__ import annotations

import csv
import os
import random
import subprocess
import sys
import tempfile
import time
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib.util import find_spec
from itertools import islice
from pathlib import Path

from fhir.resources.R4B.bundle import Bundle as ModelBundle
from measuring import Row, at_least, at_most

from fhirgallop import api
from fhirgallop.bulk.spark import code_files
from fhirgallop.bulk.wish import Wish, sources
from fhirgallop.codes import fhirjson
from fhirgallop.intake.record import LocalRecord

ROOT = Path(__file__).resolve().parents[2]
TABLE = ROOT.parent / "shared" / "data" / "circor-2022" / "training_data.csv"
MAP = ROOT / "examples" / "informatician" / "circor-2022.yaml"
EXAMS = int(os.environ.get("BENCH_EXAMS", "20000"))
SMALL = 10_000
MODELLED = 60


def varied(count: int, out: Path, *, seed: int = 2022) -> Path:
    """A table of `count` examinations: the real rows again and again, each a patient of its own."""
    dice = random.Random(seed)
    with TABLE.open(newline="", encoding="utf-8") as file:
        header, *rows = csv.reader(file)
    height, weight = header.index("Height"), header.index("Weight")
    with out.open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file)
        writer.writerow(header)
        for number in range(count):
            row = list(dice.choice(rows))
            row[0] = str(100_000 + number)
            for place in (height, weight):
                if row[place] != "nan":
                    row[place] = f"{float(row[place]) * dice.uniform(0.97, 1.03):.1f}"
            writer.writerow(row)
    return out


@dataclass(frozen=True)
class Ran:
    """One run: seconds by the clock, and the largest sum of its processes' own memory, in megabytes."""

    seconds: float
    memory: float


def backfill(table: Path, out: Path, workers: int) -> Ran:
    """Runs the command and watches its processes."""
    command = [
        sys.executable, "-m", "fhirgallop", "backfill", str(table), "--map", str(MAP), "--out", str(out),
        "--workers", str(workers), "--gzip", "--recorded", "2026-12-01T08:30:00Z",
    ]  # fmt: skip
    start, peak = time.perf_counter(), 0
    process = subprocess.Popen(command, stderr=subprocess.DEVNULL)
    while process.poll() is None:
        peak = max(peak, sum(_own_memory(one) for one in _family(process.pid)))
        time.sleep(0.2)
    if process.returncode:
        raise RuntimeError(f"backfill ended with {process.returncode}")
    return Ran(time.perf_counter() - start, peak / 1024)


def on_spark(table: Path, out: Path) -> float:
    """Seconds of the same on Spark with two processes, its start included."""
    command = [sys.executable, str(Path(__file__).resolve()), str(table), str(out)]
    start = time.perf_counter()
    subprocess.run(command, check=True, capture_output=True)
    return time.perf_counter() - start


def _spark(table: Path, out: Path) -> None:
    from pyspark.sql import SparkSession  # noqa: PLC0415 - of an extra

    os.environ["PYSPARK_PYTHON"] = sys.executable
    config = {"spark.driver.host": "127.0.0.1", "spark.ui.enabled": "false"}
    session = SparkSession.builder.master("local[2]").config(map=config).getOrCreate()
    wish = Wish(MAP.read_bytes(), MAP.name, datetime(2026, 12, 1, 8, 30, tzinfo=UTC))
    coded = code_files(session, sources([table]), wish)
    coded.write.partitionBy("kind").option("compression", "gzip").text(out.as_uri())
    session.stop()


def _family(process: int) -> Sequence[int]:
    """A process and its children."""
    try:
        children = Path(f"/proc/{process}/task/{process}/children").read_text(encoding="ascii")
    except OSError:
        return [process]
    return [process, *map(int, children.split())]


def _own_memory(process: int) -> int:
    """Proportional set size in kilobytes: what is shared counts once."""
    try:
        lines = Path(f"/proc/{process}/smaps_rollup").read_text(encoding="ascii").splitlines()
    except OSError:
        return 0
    return next((int(line.split()[1]) for line in lines if line.startswith("Pss:")), 0)


def _modelled(table: Path) -> float:
    """Seconds an examination of the model library reading, checking and writing the same Bundles."""
    template = api.read_map(MAP)
    now = datetime(2026, 12, 1, 8, 30, tzinfo=UTC)
    records = [r for r in islice(api.read_records(table), MODELLED) if isinstance(r, LocalRecord)]
    bundles = [api.process(record, template, recorded=now).bundle for record in records]
    texts = [fhirjson.write(bundle) for bundle in bundles if bundle]
    ModelBundle.model_validate_json(texts[0]).model_dump_json()
    start = time.process_time()
    for text in texts:
        ModelBundle.model_validate_json(text).model_dump_json()
    return (time.process_time() - start) / len(texts)


def rows() -> Iterator[Row]:
    """The measured rows."""
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        small, large = varied(SMALL, folder / "small.csv"), varied(EXAMS, folder / "large.csv")
        few = backfill(small, folder / "few", 2)
        two = backfill(large, folder / "two", 2)
        one = backfill(large, folder / "one", 1)
        much, little = f"{EXAMS:,} examinations", f"{SMALL:,}"
        yield at_most(f"peak memory of a back-fill of {much} / {little}", two.memory / few.memory, 1.05)
        yield at_most(f"peak memory of all processes, two workers, {much}", two.memory, 300, "MB")
        yield at_least(f"two workers / one, {much}", one.seconds / two.seconds, 1.8, fails=1.2)
        each = one.seconds / EXAMS  # the start of the run included, so that it is never flattered
        yield at_least(
            "the model library reading, checking and writing the Bundles / back-fill, one worker",
            _modelled(small) / each, 60, fails=5,
        )  # fmt: skip
        yield at_least(
            f"examinations a second, two workers, {much}", EXAMS / two.seconds, 1000, "/s", fails=300
        )
        if find_spec("pyspark"):
            seconds = on_spark(large, folder / "spark")
            yield at_most(
                f"Spark with two processes / two workers, {much}", seconds / two.seconds, 2, fails=6
            )


if __name__ == "__main__":
    _spark(Path(sys.argv[1]), Path(sys.argv[2]))
