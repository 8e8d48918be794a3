"""The command line: what it prints, what it exits with, and where it says that something is wrong."""

from __future__ import annotations

import io
import json
import os
import re
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

import app.commands.main as commands
import core
from app.commands.main import COMMANDS, main, parser
from app.commands.output import print_json
from app.export.files import carried
from core.rewrite import Offer
from core.sheet import edit
from core.sheet.document import new_sheet
from core.sheet.file import from_json, save
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
    assert json.loads(out(capsys))["findings"][0]["finding"] == "null trap"


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


@pytest.mark.parametrize(
    ("arguments", "said"),
    [
        (["compare", "-", "-"], "only once"),
        (["compare", "-", "x.sql", "--catalog", "-"], "only once"),
        (["compare", "a.sql", "b.sql", "--seconds", "-1"], "not negative"),
        (["findings", "a.sql", "--above", "nan"], "not negative"),
        (["draw", "a.sql"], "--out"),
        (["compere", "a.sql", "b.sql"], "did you mean the command compare?"),
    ],
)
def test_wrong_use_is_said(arguments: list[str], said: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(arguments) == 2
    assert said in capsys.readouterr().err


def test_a_file_that_is_missing_opens_no_window(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["nowhere/at/all.sql"]) == 3
    assert "nowhere/at/all.sql" in capsys.readouterr().err


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="elsewhere there is always a screen")
def test_no_window_without_a_screen(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    for name in ("DISPLAY", "WAYLAND_DISPLAY"):
        monkeypatch.delenv(name, raising=False)
    assert main([]) == 3
    assert "there is no screen" in capsys.readouterr().err


@pytest.mark.parametrize("command", COMMANDS)
def test_the_help_of_a_command_explains_every_argument(command: str, capsys: pytest.CaptureFixture[str]) -> None:
    assert main([command, "--help"]) == 0
    assert command in out(capsys)
    for action in parser()._subparsers._group_actions[0].choices[command]._actions:  # type: ignore[union-attr, index, call-overload]
        assert action.help, f"{command}: {action.dest}"


@pytest.mark.parametrize(
    "arguments", [["write", "--to", "klingon"], ["improve", "--to", "klingon"], ["read", "--dialect", "klingon"]]
)
def test_an_unknown_dialect_is_said(arguments: list[str], capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    (tmp_path / "q.sql").write_text("select a from t")
    assert main([arguments[0], str(tmp_path / "q.sql"), *arguments[1:]]) == 3
    assert "klingon" in capsys.readouterr().err


def test_what_is_no_text_is_said(
    capsys: pytest.CaptureFixture[str], tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    noise = b"select \xff\xfe"
    (tmp_path / "q.sql").write_bytes(noise)
    assert main(["read", str(tmp_path / "q.sql")]) == 3
    monkeypatch.setattr("sys.stdin", io.TextIOWrapper(io.BytesIO(noise)))
    assert main(["read", "-"]) == 3
    assert capsys.readouterr().err.count("is no text in UTF-8") == 2


def test_a_mark_of_byte_order_is_no_part_of_the_query(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "q.sql").write_text("select a from t", encoding="utf-8-sig")
    assert main(["write", str(tmp_path / "q.sql"), "--to", "duckdb"]) == 0
    assert out(capsys).startswith("SELECT")


def test_what_cannot_be_written_is_said(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    for name, digit in (("a", 1), ("b", 2)):
        (tmp_path / f"{name}.sql").write_text(f"select a from t where b = {digit}")
    pair = [str(tmp_path / "a.sql"), str(tmp_path / "b.sql")]
    assert main(["compare", *pair, "--witness", str(tmp_path / "no" / "w.sql")]) == 3
    assert main(["draw", *pair, "-o", str(tmp_path / "no" / "x.svg")]) == 3
    assert main(["draw", *pair, "-o", str(tmp_path / "x.gif")]) == 3
    assert capsys.readouterr().err.count(str(tmp_path / "no")) == 2


def test_the_witness_runs_in_an_engine(ground: list[str], capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    import duckdb

    pair = [Q / f"16-runs-per-route.{x}.sql" for x in "ab"]
    assert main(["compare", *map(str, pair), "--json", "--witness", str(tmp_path / "w.sql"), *ground]) == 1
    engine = duckdb.connect()
    engine.execute((tmp_path / "w.sql").read_text(encoding="utf-8"))
    a, b = (sorted(engine.execute(path.read_text(encoding="utf-8")).fetchall()) for path in pair)
    assert a != b


def test_the_better_formulation_is_equal(ground: list[str], capsys: pytest.CaptureFixture[str], tmp_path: Path) -> None:
    import duckdb

    query = Q / "09-last-seen.sql"
    assert main(["improve", str(query), *ground]) == 0
    better = out(capsys)
    engine = duckdb.connect()
    for file in demo.folder(0.2).iterdir():
        if file.suffix == ".parquet":
            engine.execute(f"create view {file.stem} as select * from '{file}'")
    # What is printed runs as it stands: everything but the SQL is a comment.
    assert "An estimate is not a measurement" in better
    original = engine.execute(query.read_text(encoding="utf-8")).fetchall()
    assert sorted(map(repr, engine.execute(better).fetchall())) == sorted(map(repr, original))


def test_numbers_that_json_has_not_are_text(capsys: pytest.CaptureFixture[str]) -> None:
    print_json({"a": [float("inf"), float("nan")], "b": (1.5, None, "x")})
    assert json.loads(out(capsys), parse_constant=pytest.fail) == {"a": ["inf", "nan"], "b": [1.5, None, "x"]}


def sheet_file(folder: Path) -> Path:
    """A sheet whose A has been rewritten and looks at its last revision, with a B beside it and a measured count."""
    catalog = core.Catalog.from_ddl("create table t (a integer primary key, b integer)")
    sheet = edit.with_text(new_sheet("Two ways", catalog), "A", "select distinct a from t where b = 7")
    formulation = sheet.drafts[0].formulation
    assert formulation is not None
    answers = (x for o in formulation.operators() for x in core.rewrites(formulation, o, catalog))
    offer = next(x for x in answers if isinstance(x, Offer) and x.rule.name == "drop-distinct")
    sheet = edit.with_text(edit.with_rewrite(sheet, "A", offer), "B", "select a from t where b = 8")
    current = sheet.drafts[0].formulation
    assert current is not None
    sheet = replace(sheet, measured={current.root: 4321})
    save(sheet, folder / "two.planimeter")
    return folder / "two.planimeter"


def test_a_sheet_stands_for_its_current_formulation(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    file = sheet_file(tmp_path)
    assert main(["write", str(file), "--to", "duckdb"]) == 0
    assert "DISTINCT" not in out(capsys)
    assert main(["write", f"{file}:B", "--to", "duckdb"]) == 0
    assert "8" in out(capsys)
    assert main(["read", str(file)]) == 0
    assert "measured 4321" in out(capsys)
    assert main(["compare", str(file), f"{file}:B"]) == 1
    capsys.readouterr()
    assert main(["read", f"{file}:C"]) == 3
    assert "it holds A, B" in capsys.readouterr().err


def test_a_sheet_is_drawn_as_it_stands(tmp_path: Path) -> None:
    file = sheet_file(tmp_path)
    assert main(["draw", str(file), "-o", str(tmp_path / "x.svg")]) == 0
    payload = carried(tmp_path / "x.svg")
    assert payload is not None
    drawn = from_json(payload.decode())
    assert drawn.title == "Two ways" and [(d.letter, d.current) for d in drawn.drafts] == [("A", 1), ("B", 0)]
    # One formulation of it beside a query: the current one, not the text it began with.
    (tmp_path / "q.sql").write_text("select b from t")
    assert main(["draw", str(file), str(tmp_path / "q.sql"), "-o", str(tmp_path / "y.svg")]) == 0
    payload = carried(tmp_path / "y.svg")
    assert payload is not None
    assert "DISTINCT" not in from_json(payload.decode()).drafts[0].text


def test_profile_looks_at_the_data_again(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    data, old, new = tmp_path / "t.csv", tmp_path / "old.toml", tmp_path / "new.toml"
    data.write_text("a\n1\n2\n")
    assert main(["profile", str(data), "-o", str(old)]) == 0
    data.write_text("a\n1\n2\n3\n")
    assert main(["profile", str(data), "--catalog", str(old), "-o", str(new)]) == 0
    facts = core.Catalog.load(new).relation("t")
    assert facts is not None and facts.rows == 3


def shell(*arguments: str, **settings: str) -> subprocess.CompletedProcess[bytes]:
    environment = {**os.environ, **settings}
    code = "import sys; from app.commands.main import main; sys.exit(main())"
    return subprocess.run(
        [sys.executable, "-c", code, *arguments], capture_output=True, cwd=ROOT, env=environment, timeout=60
    )


def test_signs_are_written_whatever_the_locale(tmp_path: Path) -> None:
    (tmp_path / "q.sql").write_text("select a from t where b = 1")
    done = shell("read", str(tmp_path / "q.sql"), PYTHONIOENCODING="ascii")
    assert done.returncode == 0, done.stderr
    assert "σ b = 1" in done.stdout.decode("utf-8")


def test_a_reader_that_has_had_enough_is_no_fault(tmp_path: Path) -> None:
    (tmp_path / "q.sql").write_text(" union all ".join(f"select a from t where b = {i}" for i in range(300)))
    code = "import sys; from app.commands.main import main; sys.exit(main())"
    with subprocess.Popen(
        [sys.executable, "-c", code, "read", str(tmp_path / "q.sql"), "--json"],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        cwd=ROOT,
    ) as process:
        assert process.stdout is not None and process.stderr is not None
        process.stdout.read(10)
        process.stdout.close()
        errors = process.stderr.read()
        assert process.wait(60) == 0
    assert b"Broken" not in errors and b"fault" not in errors


def test_a_stop_from_the_keyboard(monkeypatch: pytest.MonkeyPatch) -> None:
    def stopped(asked: object) -> int:
        raise KeyboardInterrupt

    monkeypatch.setitem(commands._RUN, "read", stopped)
    assert main(["read", "x.sql"]) == 130


def test_our_own_fault_leaves_a_file(monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]) -> None:
    def broken(asked: object) -> int:
        raise AssertionError("a fault on purpose")

    monkeypatch.setitem(commands._RUN, "read", broken)
    assert main(["read", "x.sql"]) == 5
    file = Path(capsys.readouterr().err.strip().rsplit(" ", 1)[1])
    assert "a fault on purpose" in file.read_text(encoding="utf-8")
    file.unlink()


@pytest.mark.parametrize("command", [c for c in COMMANDS if c not in ("draw", "profile")])
def test_only_drawing_loads_qt(command: str, tmp_path: Path) -> None:
    (tmp_path / "q.sql").write_text("select a from t where b = 1")
    rest = {"compare": [str(tmp_path / "q.sql")], "write": ["--to", "spark"]}.get(command, [])
    code = "import sys; from app.commands.main import main; main(); sys.exit('PySide6' in sys.modules)"
    done = subprocess.run(
        [sys.executable, "-c", code, command, str(tmp_path / "q.sql"), *rest], capture_output=True, cwd=ROOT, timeout=60
    )
    assert done.returncode == 0, done.stderr


def test_the_readme_shows_what_is_printed(capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch) -> None:
    """Where this fails because a command says something else now, and rightly, the README is to be brought up to date."""
    monkeypatch.chdir(ROOT / "assets" / "demo")
    text = (ROOT / "README.md").read_text(encoding="utf-8")
    blocks = re.findall(r"```console\n\$ planimeter (.*?)\n(.*?)```", text, re.DOTALL)
    assert len(blocks) >= 2
    for command, printed in blocks:
        main(command.split())
        assert out(capsys) == printed


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


def test_the_readme_gives_actions_of_the_window_their_shortcuts() -> None:
    from app.actions import ENTRIES

    text = re.sub(r"\s+", " ", (ROOT / "README.md").read_text(encoding="utf-8"))
    shortcuts = {entry.name.rstrip("…"): entry.shortcut for entry in ENTRIES}
    named = re.findall(r"\*([A-Z][^*]+)\* \((Ctrl[^)]+)\)", text)
    assert len(named) >= 5
    for name, shortcut in named:
        assert shortcuts[name] == shortcut
    for shortcut in re.findall(r"Ctrl\+[A-Z](?![a-z])", text):
        assert shortcut in shortcuts.values(), shortcut
