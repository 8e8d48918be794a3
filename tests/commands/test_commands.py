"""The command line: what it prints, what it exits with, and where it says that something is wrong."""

from __future__ import annotations

import io
import json
import re
from pathlib import Path

import pytest

from app.commands.main import COMMANDS, main, parser
from tests.data import demo

ROOT = Path(__file__).resolve().parents[2]
Q = ROOT / "assets" / "demo" / "queries"


@pytest.fixture(scope="module")
def ground(tmp_path_factory: pytest.TempPathFactory) -> list[str]:
    """The demo's catalog as a file, and its data."""
    folder = demo.folder(0.2)
    catalog = tmp_path_factory.mktemp("catalog") / "demo.toml"
    ddl = ROOT / "assets" / "demo" / "schema.sql"
    assert main(["profile", str(folder), "--catalog", str(ddl), "-o", str(catalog)]) == 0
    return ["--catalog", str(catalog), "--data", str(folder)]


def out(capsys: pytest.CaptureFixture[str]) -> str:
    return capsys.readouterr().out


def test_read(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["read", str(Q / "01-late-parcels-by-depot.a.sql"), "--measure", *ground]) == 0
    text = out(capsys)
    assert "⋈ parcel_id = parcel_id  [" in text and "measured" in text
    assert "An estimate is not a measurement" in text


def test_the_same_bytes_for_the_same_input(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    texts = []
    for _ in range(2):
        assert main(["read", str(Q / "13-depots-above-their-region.sql"), "--json", *ground]) == 0
        texts.append(out(capsys))
    assert texts[0] == texts[1]
    operators = json.loads(texts[0])["operators"]
    assert operators[-1]["size"]["derivation"]


def test_compare_equal(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    pair = [str(Q / f"01-late-parcels-by-depot.{x}.sql") for x in "ab"]
    assert main(["compare", *pair, *ground]) == 0
    assert out(capsys).startswith("A ≡ B  proved")


def test_compare_different(ground: list[str], capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    pair = [str(Q / f"16-runs-per-route.{x}.sql") for x in "ab"]
    witness = tmp_path / "w.sql"
    assert main(["compare", *pair, "--json", "--witness", str(witness), *ground]) == 1
    document = json.loads(out(capsys))
    assert document["verdict"] == "different" and document["witness"]["only_a"]
    assert "CREATE TABLE" in witness.read_text()


def test_compare_undecided(capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    (tmp_path / "a.sql").write_text("select a, random() as x from t")
    assert main(["compare", str(tmp_path / "a.sql"), str(tmp_path / "a.sql"), "--seconds", "1"]) == 4


def test_findings(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    query = str(Q / "03-late-and-never-told.sql")
    assert main(["findings", query, *ground]) == 0
    assert "null trap" in out(capsys)
    assert main(["findings", query, "--above", "0", "--json", *ground]) == 1
    assert json.loads(out(capsys))[0]["finding"] == "null trap"


def test_improve(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["improve", str(Q / "09-last-seen.sql"), "--json", *ground]) == 0
    document = json.loads(out(capsys))
    assert any(step["rewrite"] == "scalar-aggregate-to-join" for step in document["revisions"])
    assert "LEFT JOIN" in document["sql"]


def test_write(ground: list[str], capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["write", str(Q / "10-late-share-by-depot.sql"), "--to", "bigquery", *ground]) == 0
    assert "SELECT" in out(capsys)
    assert main(["write", str(Q / "10-late-share-by-depot.sql"), "--to", "klingon", *ground]) == 3
    assert "klingon" in capsys.readouterr().err


@pytest.mark.parametrize("ending", ["svg", "pdf", "png"])
def test_draw(ground: list[str], tmp_path: Path, ending: str) -> None:
    target = tmp_path / f"x.{ending}"
    pair = [str(Q / f"01-late-parcels-by-depot.{x}.sql") for x in "ab"]
    assert main(["draw", *pair, "-o", str(target), *ground]) == 0
    assert target.stat().st_size > 10_000


def test_standard_input(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    monkeypatch.setattr("sys.stdin", io.StringIO("select a from t where b = 1"))
    assert main(["write", "-", "--to", "duckdb"]) == 0
    assert "WHERE" in out(capsys)


def test_errors_have_a_place_and_a_caret(ground: list[str], capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    query = tmp_path / "q.sql"
    query.write_text("select depot_id,\n  weigth_kg\nfrom parcels")
    assert main(["read", str(query), *ground]) == 3
    error = capsys.readouterr().err
    assert f"{query}:2:3: no column weigth_kg" in error
    assert "    ^^^^^^^^^" in error and "did you mean weight_kg?" in error


@pytest.mark.parametrize(
    "arguments",
    [
        ["read", "nowhere.sql"],
        ["read", "nowhere.planimeter"],
        ["profile", "nowhere", "-o", "x.toml"],
        ["read", "-", "--catalog", "nowhere.toml"],
    ],
)
def test_what_is_not_there_is_said(
    arguments: list[str], capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("sys.stdin", io.StringIO("select 1"))
    assert main(arguments) == 3
    assert "nowhere" in capsys.readouterr().err


def test_usage(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["read"]) == 2
    capsys.readouterr()
    assert main(["--help"]) == 0
    text = out(capsys)
    assert all(command in text for command in COMMANDS)


def test_the_readme_knows_every_command_option_rule_and_finding() -> None:
    from core.finding import KINDS
    from core.rewrite import RULES

    text = re.sub(r"\s+", " ", (ROOT / "README.md").read_text(encoding="utf-8"))
    commands = parser()._subparsers._group_actions[0].choices  # type: ignore[union-attr]
    assert set(commands) == set(COMMANDS)  # type: ignore[arg-type]
    for name, command in commands.items():  # type: ignore[union-attr]
        assert f"planimeter {name} " in text
        for action in command._actions:
            for option in action.option_strings:
                if option not in ("-h", "--help"):
                    assert option in text, f"{name} {option}"
    for rule in RULES:
        assert f"`{rule.name}`" in text, rule.name
    for kind in KINDS:
        source = Path(kind.__code__.co_filename).read_text(encoding="utf-8")
        names = re.findall(r'Finding\(\s*"([^"]+)"', source)
        assert names and all(name in text for name in names), names
