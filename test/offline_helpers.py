"""Small recordings of our own and the offline commands run on them."""

import csv
import json

from click.testing import CliRunner

from ros_echo_perception.core.head import load_head
from ros_echo_perception.offline.cli import main
from ros_echo_perception.offline.options import REFUSED_EXIT_CODE
from ros_echo_perception.offline.resources import shipped
from ros_echo_perception.sources.bench import bench_source, poles
from ros_echo_perception.sources.simulated_recording import write_simulated_recording

HEADS = ("sparrow_52", "heron_180")
PLACES = ((0.8, 0.1), (1.7, -0.2))  # range m, bearing rad of two poles


def run(*arguments, code=0):
    result = CliRunner().invoke(main, [str(a) for a in arguments])
    assert result.exit_code == code, (result.output, result.exception)
    return result


def refused(*arguments):
    """The one line of a refusal."""
    result = run(*arguments, code=REFUSED_EXIT_CODE)
    lines = result.stderr.strip().splitlines()
    assert len(lines) == 1, result.stderr
    assert "Traceback" not in result.output
    return lines[0]


def head_file(name):
    return shipped(f"config/heads/{name}.yaml")


def make_folder(tmp_path_factory):
    """Two poles before each of two heads, 3 pings each, and 1.28 s of a drive."""
    folder = tmp_path_factory.mktemp("recordings")
    for name in HEADS:
        source = bench_source(load_head(head_file(name)), poles(*PLACES), n_pings=3)
        write_simulated_recording(source, folder / f"bench_{name}")
    run("simulate", "--head", head_file(HEADS[0]), "--seconds", 1.28, "--out",
        folder / "drive.wav")  # fmt: skip
    return folder


def read_csv(path):
    with path.open(newline="") as file:
        return list(csv.DictReader(file))


def make_copied(folder, tmp_path):
    """A recording to be spoilt: (path of .wav, sidecar as a dict, function to save it)."""
    base = tmp_path / "spoilt"
    source = folder / f"bench_{HEADS[0]}"
    base.with_suffix(".wav").write_bytes(source.with_suffix(".wav").read_bytes())
    side = json.loads(source.with_suffix(".json").read_text())

    def save():
        base.with_suffix(".json").write_text(json.dumps(side))

    save()
    return base.with_suffix(".wav"), side, save
