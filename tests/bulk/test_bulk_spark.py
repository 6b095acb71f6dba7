"""A Spark cluster of one master and two workers on loopback: the bytes of the one-machine path.

Not part of the ordinary run, for Spark is 820 MB: pip install '.[test,spark]' and pytest -m spark tests/bulk.
"""

from __future__ import annotations

import os
import signal
import socket
import subprocess
import sys
import threading
import time
from collections import Counter
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import pytest

from fhirgallop.bulk import spark
from fhirgallop.bulk.tally import Tally
from fhirgallop.bulk.wish import Wish, sources

pytestmark = [pytest.mark.spark, pytest.mark.filterwarnings("default")]

Backfill = Callable[..., tuple[Path, Tally]]
PATIENCE = 90


def free_port() -> int:
    """A port that nobody uses."""
    with socket.create_server(("127.0.0.1", 0)) as server:
        return int(server.getsockname()[1])


@dataclass
class Cluster:
    """One master, two workers of one core each."""

    address: str
    workers: list[subprocess.Popen[bytes]]


@pytest.fixture(scope="module")
def cluster(tmp_path_factory: pytest.TempPathFactory) -> Iterator[Cluster]:
    """Started by the test; ends with it."""
    import pyspark  # noqa: PLC0415 - not there in the ordinary run

    home, folder, port = Path(pyspark.__file__).parent, tmp_path_factory.mktemp("spark"), free_port()
    env = {
        **os.environ, "SPARK_HOME": str(home), "SPARK_LOCAL_IP": "127.0.0.1",
        "PYSPARK_PYTHON": sys.executable,
        "SPARK_WORKER_DIR": str(folder / "work"), "SPARK_LOCAL_DIRS": str(folder / "local"),
        "SPARK_DAEMON_MEMORY": "256m",
    }  # fmt: skip
    running: list[subprocess.Popen[bytes]] = []

    def start(name: str, *words: str) -> subprocess.Popen[bytes]:
        command = [
            home / "bin" / "spark-class",
            f"org.apache.spark.deploy.{name}",
            "--host",
            "127.0.0.1",
            *words,
        ]
        with (folder / f"{name.rpartition('.')[2]}{len(running)}").open("wb") as log:
            process = subprocess.Popen(command, env=env, stdout=log, stderr=log, start_new_session=True)
        running.append(process)
        return process

    address = f"spark://127.0.0.1:{port}"
    try:
        start("master.Master", "--port", str(port), "--webui-port", str(free_port()))
        workers = [
            start(
                "worker.Worker", "--cores", "1", "--memory", "1g", "--webui-port", str(free_port()), address
            )
            for _ in range(2)
        ]
        until(lambda: text_of(folder / "Master0").count("Registering worker") == 2)
        yield Cluster(address, workers)
    finally:
        for process in running:
            if process.poll() is None:
                os.killpg(process.pid, signal.SIGKILL)
                process.wait()


def text_of(path: Path) -> str:
    """A log so far."""
    return path.read_text(errors="replace") if path.exists() else ""


def until(done: Callable[[], bool]) -> None:
    """Waits, but not for ever."""
    end = time.monotonic() + PATIENCE
    while not done():
        assert time.monotonic() < end, "it does not come"
        time.sleep(0.1)


@contextmanager
def session(address: str) -> Iterator[Any]:
    """A driver's session."""
    from pyspark.sql import SparkSession  # noqa: PLC0415

    os.environ["PYSPARK_PYTHON"] = sys.executable
    built = (
        SparkSession.builder.master(address)
        .config("spark.driver.host", "127.0.0.1")
        .config("spark.driver.bindAddress", "127.0.0.1")
        .config("spark.ui.enabled", "false")
        .config("spark.executor.memory", "600m")
        .config("spark.executorEnv.PYTHONPATH", os.pathsep.join(sys.path))
        .getOrCreate()
    )
    try:
        yield built
    finally:
        built.stop()


def written(out: Path) -> Counter[tuple[str, str]]:
    """All lines of a run's folder."""
    return Counter(
        (path.parent.name, line)
        for path in out.glob("*/*.ndjson")
        if path.name != "repeats.ndjson"
        for line in path.read_text(encoding="utf-8").splitlines()
    )


def same(frame: Any, out: Path, tally: Tally) -> None:
    """Holds a coded frame against a run's folder."""
    kept = frame.cache()
    rows = Counter((row.kind, row.text) for row in kept.where(kept["kind"] != spark.TALLY).collect())
    assert rows == written(out)
    assert replace(spark.tally_of(kept), repeats=tally.repeats) == tally


def test_local_mode(wish: Wish, table: Callable[[int], Path], backfill: Backfill) -> None:
    source = table(400)
    out, tally = backfill(wish, source)
    with session("local[2]") as started:
        same(spark.code_files(started, sources([source]), wish), out, tally)
        texts = [('{"exam":"E1","pid":"P1","day":"2020-01-01","murmur":"yes"}',)]
        frame = spark.code_column(started.createDataFrame(texts, "record string"), "record", wish)
        assert {row.kind for row in frame.collect()} >= {"Observation", "DiagnosticReport", "Provenance"}


def test_standalone_cluster(
    wish: Wish, table: Callable[[int], Path], backfill: Backfill, cluster: Cluster
) -> None:
    source = table(1000)
    out, tally = backfill(wish, source)
    with session(cluster.address) as started:
        same(spark.code_files(started, sources([source]), wish), out, tally)


def test_a_worker_killed_on_the_way_loses_nothing(
    wish: Wish, table: Callable[[int], Path], backfill: Backfill, cluster: Cluster, tmp_path: Path
) -> None:
    source = table(6000)
    wanted = replace(wish, each=100)
    out, tally = backfill(wanted, source, workers=2)
    coded = tmp_path / "coded"
    with session(cluster.address) as started:

        def kill() -> None:
            until(lambda: any(coded.rglob("part-*")))
            os.killpg(cluster.workers[0].pid, signal.SIGKILL)

        killer = threading.Thread(target=kill)
        killer.start()
        spark.code_files(started, sources([source]), wanted).write.parquet(coded.as_uri())
        killer.join()
        assert cluster.workers[0].wait(PATIENCE) == -signal.SIGKILL
        same(started.read.parquet(coded.as_uri()), out, tally)
