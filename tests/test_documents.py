"""The documents say what the code does: every command, settings key and topic, and no command or link that is not."""

from __future__ import annotations

import argparse
import dataclasses
import importlib
import re
import shlex
from pathlib import Path

import pytest

from edgewatch.commands.cli import COMMANDS, main
from edgewatch.judge.causes import CAUSES
from edgewatch.record.tomlfile import read_toml
from edgewatch.settings import allowed, read_settings, sections
from edgewatch.wire.kinds import KINDS
from edgewatch.wire.orders import ORDERS

TOP = Path(__file__).parents[1]
README = TOP / "README.md"
SAMPLE = TOP / "deploy" / "station.toml"
DOCUMENTS = sorted([README, TOP / "DEVELOPERS.md", TOP / "calib" / "README.md", *(TOP / "deploy").rglob("*.md")])
KEYS = [(section, part) for section, kind in sections().items() for part in dataclasses.fields(kind)]


def text_of(*paths: Path) -> str:
    """The text of these files, one after the other."""
    return "\n".join(path.read_text(encoding="utf-8") for path in paths)


def table(text: str, head: str) -> list[list[str]]:
    """The rows of the Markdown table whose first line begins with ``head``, as lists of cells."""
    lines = iter(text.splitlines())
    for line in lines:
        if line.startswith(head):
            break
    next(lines)  # the rule below the head
    rows = []
    for line in lines:
        if not line.startswith("|"):
            break
        rows.append([cell.strip() for cell in line.strip("|").split("|")])
    return rows


def parser_of(name: str) -> argparse.ArgumentParser:
    """The options that the command declares."""
    parser = argparse.ArgumentParser(prog=f"edgewatch {name}", exit_on_error=False)
    importlib.import_module(f"edgewatch.commands.{name}").declare(parser)
    return parser


def calls(text: str) -> list[tuple[str, str]]:
    """Every ``edgewatch COMMAND …`` in code, shell pipes and redirections cut off: the command and its arguments."""
    spans = re.findall(r"`([^`\n]+)`", text) + [line for line in text.splitlines() if line.startswith("    ")]
    found = [re.search(r"(?:^\s*|\|\s*|/bin/)edgewatch ([a-z]+)((?:\s[^|>&#]*)?)", span) for span in spans]
    return [(match[1], match[2]) for match in found if match]


def test_readme_lists_the_commands() -> None:
    """README's table has each command once and no other."""
    named = [row[0].strip("`").split()[0] for row in table(text_of(README), "| command |")]
    assert named == list(COMMANDS)


def test_readme_lists_the_topics() -> None:
    """README's table has each topic, with the QoS and retained flag that it really has."""
    rows = {row[0].strip("`"): row for row in table(text_of(README), "| topic |")}
    orders = rows.pop("order/…")
    assert set(rows) == {kind.leaf for kind in KINDS.values()}
    for kind in KINDS.values():
        row = rows[kind.leaf]
        assert (int(row[1]), row[2].startswith("yes")) == (kind.qos, kind.retained), kind.leaf
    assert re.findall(r"`([a-z]+)`", orders[3]) == list(ORDERS)


def test_the_mqtt_guide_lists_the_orders() -> None:
    """Each order with what it needs, and nothing that it does not take."""
    rows = {row[0].strip("`"): row[1] for row in table(text_of(TOP / "deploy/guides/mqtt.md"), "| order |")}
    assert set(rows) == set(ORDERS)
    for name, (needed, may) in ORDERS.items():
        assert set(re.findall(r"`([a-z_]+)`", rows[name])) - {"all"} == set(needed) | set(may), name


def test_the_guide_to_causes_lists_them_all() -> None:
    """Each cause with its own sentence, the condition it makes, whether it blinds or withholds, and a remedy."""
    rows = table(text_of(TOP / "deploy/guides/causes.md"), "| cause |")
    assert [row[0].strip("`") for row in rows] == list(CAUSES)
    for (_, meaning, condition, remedy), cause in zip(rows, CAUSES.values(), strict=True):
        assert meaning == cause.sentence
        effect = ", blind" if cause.blinds else ", withholds" if cause.withholds else ""
        assert condition == (f"`{cause.condition}`" if cause.condition else "–") + effect
        assert remedy


@pytest.mark.parametrize("key", [f"{section}.{part.name}" for section, part in KEYS])
def test_every_settings_key_is_explained(key: str) -> None:
    """README or a guide names it, so that somebody said what it is for."""
    assert f"`{key}`" in text_of(README, *(TOP / "deploy" / "guides").glob("*.md"))


def test_no_document_names_a_key_that_is_not() -> None:
    """``section.key`` in a document is a key that can be set."""
    known = {f"{section}.{part.name}" for section, part in KEYS}
    pattern = re.compile(rf"`((?:{'|'.join(sections())})\.[a-z_]+)(?: = [^`]*)?`")
    for path in DOCUMENTS:
        named = set(pattern.findall(text_of(path))) - {f"{name}.{end}" for name in sections() for end in ("toml", "py")}
        assert named <= known, path.name


@pytest.mark.parametrize("path", DOCUMENTS, ids=lambda path: str(path.relative_to(TOP)))
def test_links_lead_somewhere(path: Path) -> None:
    """Every relative link and picture is a file of the project."""
    for target in re.findall(r"\]\(([^)#]+)[^)]*\)", text_of(path)):
        assert "://" in target or (path.parent / target).resolve().exists(), target


@pytest.mark.parametrize("path", DOCUMENTS, ids=lambda path: str(path.relative_to(TOP)))
def test_calls_in_documents_can_be_made(path: Path) -> None:
    """Each command named in code exists and has every option that it is shown with."""
    for name, words in calls(text_of(path)):
        assert name in COMMANDS, name
        known = {option for action in parser_of(name)._actions for option in action.option_strings}
        options = {word.split("=")[0] for word in words.split() if re.match(r"--?[a-z]", word)}
        assert options <= known, f"edgewatch {name}{words}"


@pytest.mark.parametrize("path", DOCUMENTS, ids=lambda path: str(path.relative_to(TOP)))
def test_program_files_named_in_documents_exist(path: Path) -> None:
    """Files of the project's folders that are named in code, such as `tests/…/x.py` or `deploy/x.sh`, exist."""
    pattern = r"`[^`\n]*?((?:tests|deploy|edgewatch|calib)/[\w./-]+\.(?:py|sh|md|toml|yaml|conf|service))\b[^`\n]*`"
    for name in re.findall(pattern, text_of(path)):
        assert (TOP / name).exists(), name


@pytest.mark.parametrize("name", COMMANDS)
def test_help_has_an_example_that_parses(name: str, capsys: pytest.CaptureFixture[str]) -> None:
    """``--help`` ends well, says the job, and its example is a call that the command takes."""
    with pytest.raises(SystemExit) as end:
        main([name, "--help"])
    assert end.value.code == 0
    shown = capsys.readouterr().out
    example: str = importlib.import_module(f"edgewatch.commands.{name}").EXAMPLE
    assert example.splitlines()[0] in shown
    commands = re.findall(rf"edgewatch {name}\b([^|\n]*)", example.replace("\\\n", " "))
    assert commands, f"no call of {name} in its example"
    for words in commands:
        parser_of(name).parse_args(shlex.split(words.split(">")[0]))


def test_an_unknown_command_is_answered_in_one_line(capsys: pytest.CaptureFixture[str]) -> None:
    """Exit status 2 and one line on stderr."""
    with pytest.raises(SystemExit) as end:
        main(["wotch"])
    assert end.value.code == 2
    assert capsys.readouterr().err.count("\n") == 1


def sample_values() -> dict[tuple[str, str], str]:
    """Section and key -> the comment above it, as the sample has them."""
    found: dict[tuple[str, str], str] = {}
    section, comment = "", ""
    for line in text_of(SAMPLE).splitlines():
        if line.startswith("#"):
            comment += line[1:].strip() + " "
        elif match := re.fullmatch(r"\[(\w+)\]", line):
            section = match[1]
        elif match := re.fullmatch(r"(\w+) = .*", line):
            found[section, match[1]] = comment
        if not line.startswith("#"):
            comment = ""
    return found


def test_the_sample_has_every_key_and_no_other() -> None:
    """deploy/station.toml and the declarations name the same keys in the same order, and its values are valid."""
    assert list(sample_values()) == [(section, part.name) for section, part in KEYS]
    read_settings(read_toml(SAMPLE), file=SAMPLE.name)


@pytest.mark.parametrize(("section", "part"), KEYS, ids=[f"{section}.{part.name}" for section, part in KEYS])
def test_the_sample_explains_the_key(section: str, part: dataclasses.Field[object]) -> None:
    """Above each key stand its help, what is allowed and its default; deploy/renew_station.py writes them."""
    comment = sample_values()[section, part.name]
    assert part.metadata["help"] in comment
    assert allowed(section, part.name) in comment
    assert "Default: " in comment


def test_the_sample_says_the_real_defaults() -> None:
    """Reading every default as the sample states it gives the settings that an empty file gives."""
    stated: dict[str, list[str]] = {}
    for (section, key), comment in sample_values().items():
        match = re.search(r"Default: (.*)\. $", comment)
        assert match, f"{section}.{key}"
        stated.setdefault(section, []).append(f"{key} = {match[1]}")
    document = "\n".join(f"[{section}]\n" + "\n".join(lines) for section, lines in stated.items())
    assert read_settings(_parse(document), file="defaults") == read_settings({}, file="empty")


def _parse(document: str) -> dict[str, object]:
    try:
        import tomllib
    except ModuleNotFoundError:
        import tomli as tomllib
    return tomllib.loads(document)
