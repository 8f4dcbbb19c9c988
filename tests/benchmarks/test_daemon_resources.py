"""What the daemon costs while nothing is new: memory of the parent, processor time of it and all its children; and a scrape.

    pytest tests/benchmarks/test_daemon_resources.py -s
    WATCHER_BENCHMARK_SECONDS=600 pytest tests/benchmarks/test_daemon_resources.py -s

1,000 promises on 20 sources, a route with a heartbeat. The window begins when all sources were looked at and the daemon has come
to rest. Every source is due once in the window: with 600 seconds that is every = 10m, as promised; a shorter window looks
correspondingly more often, so that its figure is an upper bound of the other.
"""

from __future__ import annotations

import gzip
import os
import random
import time
from datetime import UTC, datetime, timedelta
from pathlib import Path
from urllib.request import Request, urlopen

from daemon.house import Daemon, running, until

SOURCES, PROMISES, DAYS, LABELS = 20, 50, 30, 5
WINDOW = float(os.environ.get("WATCHER_BENCHMARK_SECONDS", "60"))
MEMORY_MIB, OF_A_CORE = 200, 0.02
SCRAPE_SECONDS, SERIES = 0.2, 8_000
TICKS = os.sysconf("SC_CLK_TCK")


def prepare(folder: Path, sources: int, promises: int, every: int) -> Path:
    """Files, and a configuration whose promises were released thirty days ago."""
    today = datetime.now(UTC).replace(hour=0, minute=0, second=0, microsecond=0)
    first = today - timedelta(days=DAYS)
    text = ['[ledger]\nurl = "sqlite:///watcher.db"\n[web]\nlisten = "127.0.0.1:0"\n']
    for s in range(sources):
        (folder / f"s{s}.csv").write_text(rows(first, promises, random.Random(s)), encoding="utf-8")
        text.append(
            f'[[source]]\nname = "s{s}"\nkind = "csv"\npath = "s{s}.csv"\nevery = "{every}s"\ntimeout = "1h"\n'
            '[source.columns]\nid = "id"\ntime = "at"\nprediction = "said"\nlabel = "was"\n'
        )
        for p in range(promises):
            text.append(
                f'[[promise]]\nname = "s{s}-p{p}"\nsource = "s{s}"\nwhere = {{ line = "p{p}" }}\ntolerance = 0.03\nrisk = 0.001\n'
                f'released = {first:%Y-%m-%dT%H:%M:%SZ}\nlabel_lag = "1d"\nuncertified = true\n'
            )
    text.append('[[route]]\nname = "desk"\nkind = "log"\nheartbeat = "1d"\n')
    config = folder / "watcher.toml"
    config.write_text("\n".join(text), encoding="utf-8")
    return config


def rows(first: datetime, promises: int, draw: random.Random) -> str:
    """Five labels a day for each promise, 2% of them errors."""
    lines = ["id,at,said,was,line"]
    for p in range(promises):
        for d in range(DAYS):
            for n in range(LABELS):
                at = first + timedelta(days=d, hours=8, minutes=n)
                said = "b" if draw.random() < 0.02 else "a"
                lines.append(f"{p}-{d}-{n},{at:%Y-%m-%dT%H:%M:%SZ},{said},a,p{p}")
    return "\n".join(lines) + "\n"


def spent(session: int) -> float:
    """Processor seconds of every process of a session and of those it has waited for."""
    total = 0
    for place in Path("/proc").iterdir():
        if place.name.isdigit():
            try:
                fields = (place / "stat").read_text().rpartition(")")[2].split()
            except OSError:
                continue
            if int(fields[3]) == session:
                total += sum(map(int, fields[11:15]))
    return total / TICKS


def resident(pid: int) -> float:
    """MiB of a process."""
    status = Path(f"/proc/{pid}/status").read_text()
    return int(status.partition("VmRSS:")[2].split()[0]) / 1024


def at_rest(daemon: Daemon, session: int) -> None:
    """Wait until the start's work is done: five seconds with next to nothing spent."""

    def idle() -> bool:
        before = spent(session)
        time.sleep(5)
        return spent(session) - before < 0.15

    until(idle, 1200)


def test_a_thousand_promises_at_rest(tmp_path: Path) -> None:
    """The parent stays below 200 MiB, and all processes together below 2% of a core."""
    config = prepare(tmp_path, SOURCES, PROMISES, int(WINDOW))
    with running(config, own_group=True) as daemon:
        session = daemon.process.pid
        until(lambda: daemon.process.poll() is None and daemon.get("/readyz")[0] == 200, 3600)
        started = spent(session)
        assert len(daemon.said("look recorded")) == SOURCES
        at_rest(daemon, session)
        begun, before = time.monotonic(), spent(session)
        time.sleep(WINDOW)
        used, window = spent(session) - before, time.monotonic() - begun
        memory = resident(session)
        looks = len(daemon.said("look recorded"))
        code = daemon.stop()

    print(
        f"\n{SOURCES * PROMISES} promises on {SOURCES} sources: start {started:.1f} s of processor time; at rest {used:.2f} s in "
        f"{window:.0f} s, {used / window:.2%} of a core, a look every {WINDOW:.0f} s; parent {memory:.0f} MiB"
    )
    assert code == 0
    assert looks == SOURCES  # nothing was new
    assert memory < MEMORY_MIB
    assert used / window < OF_A_CORE


def test_a_scrape_of_eight_thousand_series(tmp_path: Path) -> None:
    """A scrape of at least 8,000 series takes less than 200 ms, whether or not the ledger has moved on; best of ten."""
    config = prepare(tmp_path, 2, PROMISES + 110, 600)
    with running(config) as daemon:
        until(lambda: daemon.process.poll() is None and daemon.get("/readyz")[0] == 200, 1800)
        first, count = scraped(daemon.address)
        again = min(scraped(daemon.address)[0] for _ in range(10))
        daemon.stop()

    print(f"\n{count} series: {again * 1000:.0f} ms, the first scrape after a look {first * 1000:.0f} ms")
    assert count >= SERIES
    assert again < SCRAPE_SECONDS


def scraped(address: str) -> tuple[float, int]:
    """Seconds and series of one scrape, asked for as Prometheus does."""
    accept = "application/openmetrics-text;version=1.0.0,text/plain;version=0.0.4;q=0.5"
    request = Request(address + "/metrics", headers={"accept": accept, "accept-encoding": "gzip"})
    begun = time.perf_counter()
    with urlopen(request, timeout=60) as answer:
        body = answer.read()
    took = time.perf_counter() - begun
    return took, sum(1 for line in gzip.decompress(body).splitlines() if line and not line.startswith(b"#"))
