"""Every ready configuration is parsed, and looks at data made for it: each labelled row counts, none is rejected."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from config.parcels import RELEASED, rows, write_csv, write_postgresql, write_sqlite

from watcher import assembly, settings
from watcher.ledger.store import Ledger
from watcher.look import Outcome, look
from watcher.notices.base import CommandTarget, MailTarget, WebhookTarget

EXAMPLES = Path(__file__).parents[2] / "config"
DAY = 86_400
END = int(RELEASED.timestamp()) + 40 * DAY
"""Past the last label lag: everything is sealed."""
SECRETS = {
    "WATCHER_RETRAIN_SECRET": "whsec_" + "MDEyMzQ1Njc4OTAxMjM0NTY3ODkwMTIzNDU2Nzg5MDE=",
    "WATCHER_MAIL_PASSWORD": "p",
}
"""Base64 of 32 digits, in the form that docs/notices.md asks for."""
CSV = ("csv", "weights", "probabilities", "clusters", "arriving", "routes")


def judged(folder: Path, name: str, environment: dict[str, str] | None = None) -> Outcome:
    """One look in memory at the example, which is copied beside its data; every secret that it needs is there."""
    for file in EXAMPLES.iterdir():
        shutil.copy(file, folder)
    config = settings.read(folder / f"{name}.toml", SECRETS | (environment or {}))
    assembly.route_specs(config)
    [table] = config.source
    with Ledger.memory() as ledger:
        return look(
            ledger,
            assembly.source_of(config, table),
            assembly.watched(config, table.name),
            END,
            at_given=True,
            routes=assembly.routings(config),
        )


def whole(outcome: Outcome) -> tuple[int, int]:
    """Labels and predictions in the evidence; nothing is rejected, nothing is left waiting."""
    assert outcome.rejected == {}
    standing = outcome.standings[0]
    assert (standing.column, standing.provisional_labels) == ("", 0)
    return standing.labels, standing.predictions


def labelled(**wanted: str) -> int:
    """Counted here, in plain Python."""
    return sum(bool(row["observed"]) and all(row[k] == v for k, v in wanted.items()) for row in rows())


@pytest.mark.parametrize("name", CSV)
def test_an_example_with_csv_files_counts_every_label(name: str, tmp_path: Path) -> None:
    """As many labels and predictions as plain Python counts; slices too where there are some."""
    write_csv(tmp_path)
    outcome = judged(tmp_path, name)

    assert whole(outcome) == (labelled(), len(rows()))
    for standing in outcome.standings[1:]:
        assert standing.labels == labelled(**{standing.column: standing.value})


def test_the_example_with_sqlite_counts_the_damaged(tmp_path: Path) -> None:
    """A promise about misses: its labels are the damaged ones."""
    write_sqlite(tmp_path)

    assert whole(judged(tmp_path, "sqlite"))[0] == labelled(observed="damaged")


@pytest.mark.peer("postgresql")
def test_the_example_with_postgresql_counts_its_version_alone(postgresql: str, tmp_path: Path) -> None:
    """The join gives every photo once; those of another model are outside; days are those of the zone."""
    write_postgresql(postgresql)
    outcome = judged(tmp_path, "postgresql", {"WATCHER_LABELS_URL": postgresql, "WATCHER_LEDGER_URL": postgresql})

    assert whole(outcome) == (labelled(), len(rows()))
    assert {s.value: s.labels for s in outcome.standings[1:]} == {
        depot: labelled(depot=depot) for depot in ("Alder", "Birch", "Cedar")
    }


def test_the_ledger_of_the_postgresql_example_comes_from_the_environment() -> None:
    """No url, no password stands in the file."""
    config = settings.read(EXAMPLES / "postgresql.toml", {"WATCHER_LEDGER_URL": "postgresql+psycopg://db/watcher"})

    assert config.ledger_url() == "postgresql+psycopg://db/watcher"


def test_the_routes_of_the_example_are_what_their_comments_say(tmp_path: Path) -> None:
    """One webhook that starts retraining and carries breaches alone, a mail with the report, a program without a shell."""
    config = settings.read(EXAMPLES / "routes.toml", SECRETS)
    routes = {route.name: route for route in assembly.route_specs(config)}

    assert isinstance(routes["retraining"].target, WebhookTarget)
    assert routes["retraining"].target.secrets == (SECRETS["WATCHER_RETRAIN_SECRET"],)
    assert [name for name, route in routes.items() if route.retrain] == ["retraining"]
    assert isinstance(routes["owners"].target, MailTarget)
    assert routes["owners"].carries("report", "damage-photos")
    assert isinstance(routes["pager"].target, CommandTarget)
    assert routes["pager"].target.arguments[0].startswith("/")
    assert not routes["pager"].carries("warning", "damage-photos")
    assert routes["log"].heartbeat == DAY


def test_every_example_is_tested_and_told_about() -> None:
    """A new file must be added here and to the list in config/README.md."""
    names = {path.stem for path in EXAMPLES.glob("*.toml")}
    text = (EXAMPLES / "README.md").read_text(encoding="utf-8")

    assert names == {*CSV, "sqlite", "postgresql"}
    assert all(f"[{path.name}]({path.name})" in text for path in EXAMPLES.iterdir() if path.name != "README.md")


@pytest.mark.parametrize("path", sorted(EXAMPLES.glob("*.toml")), ids=lambda path: path.stem)
def test_no_example_holds_a_secret_or_a_real_host(path: Path) -> None:
    """Hosts are of the reserved domain or this machine (RFC 2606, from memory)."""
    config = settings.read(path, SECRETS)
    text = path.read_text(encoding="utf-8")
    hosts = [word for word in text.replace("/", " ").replace("@", " ").replace('"', " ").split() if ".example" in word]

    assert all(host.rstrip(",").endswith(".example.invalid") for host in hosts)
    assert all(route.secret_file is None and route.password_file is None for route in config.route)
