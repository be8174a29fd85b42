"""What README.md and DEVELOPERS.md say agrees with the code, the commands and the files."""

import ast
import re
import shlex
from pathlib import Path
from xml.etree import ElementTree

import pytest
import yaml

from ros_echo_perception.core.errors import FileFormatError
from ros_echo_perception.core.settings import describe
from ros_echo_perception.core.types import DetectionFlag, PingFlag
from ros_echo_perception.demo.__main__ import main as demo
from ros_echo_perception.nodes import readme_tables, topics
from ros_echo_perception.nodes.settings import SECTIONS
from ros_echo_perception.offline.cli import main as offline
from ros_echo_perception.offline.marked_block import replace_block
from ros_echo_perception.offline.results_table import BEGIN, END

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text()
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text()
BOTH = {"README.md": README, "DEVELOPERS.md": DEVELOPERS}
TABLES = README.partition(readme_tables.BEGIN)[2].partition(readme_tables.END)[0]
PROSE = README.replace(TABLES, "")
MACHINE_PATH = re.compile(r"(?<![\w.~])/(?:work|tmp|root|home|usr|opt|mnt|var|etc)\b")
LARGEST_PICTURE_BYTES = 300_000


def command_lines(text):
    """Lines of shell blocks without comments, continued lines joined."""
    for block in re.findall(r"```sh\n(.*?)```", text, re.S):
        for line in block.replace("\\\n", " ").splitlines():
            words = shlex.split(line, comments=True)
            if words:
                yield words


ALL_COMMANDS = [words for text in BOTH.values() for words in command_lines(text)]


def offline_calls(commands):
    """Arguments of every call of the offline command."""
    for words in commands:
        joined = " ".join(words)
        for start in ("-m ros_echo_perception ", "ros2 run ros_echo_perception offline "):
            if start in joined:
                yield shlex.split(joined.partition(start)[2])


def rows_of(text):
    """Cells of all Markdown table rows."""
    for line in text.splitlines():
        if line.startswith("| "):
            yield [c.strip() for c in re.split(r"(?<!\\)\|", line)[1:-1]]


# ------------------------------------------------------------------ tables of the nodes
def test_tables_are_those_that_the_code_makes():
    assert TABLES.strip() == readme_tables.tables(), (
        "./dev run python -m ros_echo_perception.nodes.readme_tables --update README.md"
    )


@pytest.mark.parametrize("node", SECTIONS)
def test_parameters_are_those_of_the_shipped_file(node):
    """Read back from the Markdown, names and defaults equal those of config/<node>.yaml."""
    section = re.search(rf"### Node `{node}`\n(.*?)(?=\n### Node|\Z)", TABLES, re.S).group(1)
    told = {
        row[0].strip("`"): yaml.safe_load(row[2].strip("`"))
        for row in rows_of(section)
        if len(row) == 7 and row[0] != "parameter"
    }
    shipped = yaml.safe_load((ROOT / f"config/{node}.yaml").read_text())["/**"]["ros__parameters"]
    assert told == dict(flat(shipped))


def flat(values, prefix=""):
    for name, value in values.items():
        if isinstance(value, dict):
            yield from flat(value, f"{prefix}{name}.")
        else:
            yield prefix + name, value


@pytest.mark.parametrize("node", SECTIONS)
def test_every_parameter_tells_type_unit_range_and_meaning(node):
    rows = {row[0].strip("`"): row for row in rows_of(TABLES) if len(row) == 7}
    for cls, prefix in SECTIONS[node].items():
        for info in describe(cls):
            row = rows[f"{prefix}.{info.name}" if prefix else info.name]
            assert row[1] in {"double", "integer", "bool", "string", "double[]", "string[]"}
            assert row[4]
            assert len(row[6]) > 10, info.name


def test_limits_are_not_rounded():
    rows = {row[0]: row for row in rows_of(TABLES)}
    assert rows["`simulator.seed`"][4] == "0 to 2147483647"
    assert rows["`scan.range_max_m`"][1:5] == ["double", "`10.0`", "m", "0.5 to 50"]


def test_topics_and_services_are_listed_with_their_quality_of_service():
    for node in SECTIONS:
        section = TABLES.partition(f"### Node `{node}`")[2].partition("### Node")[0]
        for topic in (*topics.PUBLISHES[node], *topics.SUBSCRIBES[node]):
            row = f"| `{topic.name}` | `{topic.message}` | {topics.QOS[topic.qos]} |"
            assert row in section
        for service in topics.SERVICES[node]:
            assert f"| `{service.name}` | `{service.type}` |" in section


def test_update_replaces_the_block_and_nothing_else(tmp_path):
    file = tmp_path / "README.md"
    file.write_text(f"before\n{readme_tables.BEGIN}\nold\n{readme_tables.END}\nafter\n")
    replace_block(file, readme_tables.BEGIN, readme_tables.END, "new")
    assert file.read_text() == (f"before\n{readme_tables.BEGIN}\nnew\n{readme_tables.END}\nafter\n")


def test_update_of_a_file_without_markers_is_refused(tmp_path):
    file = tmp_path / "README.md"
    file.write_text("text\n")
    with pytest.raises(FileFormatError, match=r"README.md: lacks <!-- parameters:begin -->"):
        replace_block(file, readme_tables.BEGIN, readme_tables.END, "new")
    assert file.read_text() == "text\n"


# ------------------------------------------------------------------ commands
def test_the_two_commands_come_early():
    head = README[:2500]
    assert "./dev demo" in head
    assert "./dev test" in head
    assert "./dev run" in README


def test_every_offline_command_is_shown():
    shown = {call[0] for call in offline_calls(command_lines(README))}
    assert shown - {"--help"} == set(offline.commands)


@pytest.mark.parametrize(
    "call", [c for c in offline_calls(ALL_COMMANDS) if c[0] != "--help"], ids=" ".join
)
def test_offline_calls_are_accepted(call):
    """Known options, nothing missing, values of the right kind; files are not opened."""
    command = offline.commands[call[0]]
    assert command.make_context(call[0], call[1:]).params


def test_calls_of_the_demo_are_accepted():
    calls = [line for text in BOTH.values() for line in re.findall(r"\./dev demo( --[^`#]*)", text)]
    assert calls
    for call in calls:
        assert demo.make_context("demo", [w for w in shlex.split(call) if w != "--help"]).params


def test_commands_of_dev_exist():
    usage = (ROOT / "dev").read_text().partition("<<'TEXT'")[2].partition("\nTEXT")[0]
    known = set(re.findall(r"^  (\w+) ", usage, re.M))
    lines = [" ".join(words) for words in ALL_COMMANDS]
    lines += [span for text in BOTH.values() for span in re.findall(r"`([^`\n]+)`", text)]
    used = {name for line in lines for name in re.findall(r"\./dev (\w+)", line)}
    assert {"demo", "test", "run", "setup", "clean"} <= known
    assert {"demo", "test", "run"} <= used <= known


def test_modules_that_are_run_exist():
    for words in ALL_COMMANDS:
        for name in re.findall(r"-m (ros_echo_perception[\w.]*)", " ".join(words)):
            path = ROOT / name.replace(".", "/")
            assert path.with_suffix(".py").exists() or (path / "__main__.py").exists(), name


def test_launch_files_and_their_arguments_exist():
    calls = re.findall(r"ros2 launch ros_echo_perception (\S+\.xml)([^`\n]*)", README)
    assert {name for name, _ in calls} == {p.name for p in (ROOT / "launch").iterdir()}
    for name, arguments in calls:
        declared = re.findall(r'<arg name="(\w+)"', (ROOT / "launch" / name).read_text())
        assert set(re.findall(r"(\w+):=", arguments)) <= set(declared)


def test_packages_of_a_fresh_machine_are_those_that_dev_asks_for():
    told = set(re.search(r"sudo apt install (.*)", README).group(1).split())
    asked = re.findall(r"missing\+=\(\"?([\w$-]+)\"?\)", (ROOT / "dev").read_text())
    assert told - {"python3"} == {name.replace("python$version", "python3") for name in asked}


def test_every_dependency_has_its_reason():
    """Names as in Python, keys as in package.xml (rosdep)."""
    chapter = DEVELOPERS.partition("## Dependencies")[2].partition("\n## ")[0]
    told = {name for row in rows_of(chapter) for name in re.split(r", ", row[0].lower())}
    other_names = {"yaml": "pyyaml", "sklearn": "scikit-learn"}
    manifest = ElementTree.parse(ROOT / "package.xml").getroot()
    keys = {e.text for e in manifest if e.tag.endswith("depend")}
    asked = {re.sub(r"^python3-|-pip$", "", key) for key in keys}
    assert len(asked) > 20
    assert {other_names.get(name, name) for name in asked} <= told


# ------------------------------------------------------------------ what the text names
@pytest.mark.parametrize("name", BOTH)
def test_links_lead_somewhere(name):
    anchors = {
        re.sub(r"[^\w -]", "", title).lower().replace(" ", "-")
        for title in re.findall(r"^#+ (.*)$", BOTH[name], re.M)
    }
    targets = re.findall(r"\]\(([^)]+)\)", BOTH[name])
    assert targets
    for target in targets:
        if target.startswith("#"):
            assert target[1:] in anchors
        else:
            assert (ROOT / target).exists(), target


@pytest.mark.parametrize("name", BOTH)
def test_files_of_the_checkout_that_are_named_exist(name):
    folders = (ROOT, ROOT / "ros_echo_perception")
    pattern = r"`((?:core|sources|nodes|offline|demo|msg|config|launch|test|\.ci)/[\w./]*)`"
    for path in re.findall(pattern, BOTH[name]):
        assert any((folder / path).exists() for folder in folders), path


def test_modules_of_the_chain_that_are_named_exist():
    chapter = re.search(r"## How the perception chain works\n(.*?)\n## ", DEVELOPERS, re.S).group(1)
    named = {n for group in re.findall(r"\(((?:`\w+`(?:, )?)+)\)", chapter)
             for n in re.findall(r"`(\w+)`", group)}  # fmt: skip
    assert len(named) > 10
    for module in named:
        assert (ROOT / f"ros_echo_perception/core/perception/{module}.py").exists(), module


def test_parameters_and_fields_in_the_prose_exist():
    """Names with a unit or a prefix are parameters, fields of messages, or of the JSON files."""
    parameters = {
        f"{prefix}.{info.name}" if prefix else info.name
        for sections in SECTIONS.values()
        for cls, prefix in sections.items()
        for info in describe(cls)
    }
    fields = set()
    for path in (ROOT / "msg").iterdir():
        fields |= set(re.findall(r"^[\w/]+(?:\[\])? (\w+)", path.read_text(), re.M))
    named = set(re.findall(r"`((?:\w+\.)?\w+_(?:s|m|hz|rad|c|db|probability|gain|echoes))`", PROSE))
    named |= set(re.findall(r"`((?:scan|simulator)\.\w+)", PROSE))
    assert len(named) > 10
    assert not {n for n in named if n not in parameters and n not in fields}


def test_messages_in_the_troubleshooting_table_are_what_the_code_says():
    sources = (ROOT / "dev").read_text() + "".join(
        constant.value
        for path in (ROOT / "ros_echo_perception").rglob("*.py")
        for constant in ast.walk(ast.parse(path.read_text()))
        if isinstance(constant, ast.Constant) and isinstance(constant.value, str)
    )
    flags = {f.name.lower() for kind in (PingFlag, DetectionFlag) for f in kind}
    table = README.partition("## Troubleshooting")[2].partition("\n## ")[0]
    quoted = [q for row in rows_of(table) for q in re.findall(r"`([^`]+)`", row[0])]
    assert len(quoted) > 15
    for text in quoted:
        for part in (part.strip() for part in text.split("...")):
            assert part in sources or part in flags, text


def test_results_are_those_of_the_command():
    """One block, with all tables that `score` writes and a time per ping."""
    assert README.count(BEGIN) == README.count(END) == 1
    block = README.partition(BEGIN)[2].partition(END)[0]
    first_cells = {row[0] for row in rows_of(block)}
    assert {"scenes", "**all**", "two objects", "drive"} <= first_cells
    assert "time per ping" in block


def test_pictures_are_small_png_files():
    pictures = re.findall(r"!\[[^\]]+\]\(([^)]+)\)", README)
    assert pictures
    assert {(ROOT / p).name for p in pictures} == {p.name for p in (ROOT / "doc").iterdir()}
    for picture in pictures:
        data = (ROOT / picture).read_bytes()
        assert data.startswith(b"\x89PNG\r\n\x1a\n")
        assert len(data) < LARGEST_PICTURE_BYTES


def test_cautions_name_what_the_package_is_not_and_who_decides():
    cautions = README.partition("## Cautions")[2].partition("\n## ")[0]
    for text in ("Not a protective device", "IEC 61496", "ISO 13849-1", "ISO 3691-4", "ISO 13482",
                 "local codes", "qualified people", "Ultrasound exposure"):  # fmt: skip
        assert text in cautions, text


@pytest.mark.parametrize("name", [*BOTH, "CHANGELOG.rst"])
def test_no_paths_of_a_machine(name):
    assert not MACHINE_PATH.search((ROOT / name).read_text())
