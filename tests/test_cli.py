"""The command line: results, exit codes, one-line errors."""

import io
import json
import subprocess
import sys

import pytest

from entropest import Certificate, DiagramCounts, certify
from entropest.cli import main

PAIRS = "swap,count\nsymmetric,700\nantisymmetric,300\n"
SITES = "site0,site1,accepted\n0,0,1\n1,1,1\n1,0,0\n0,1,1\n"


@pytest.fixture
def pairs(tmp_path):
    path = tmp_path / "pairs.csv"
    path.write_text(PAIRS)
    return str(path)


@pytest.fixture
def sites(tmp_path):
    path = tmp_path / "sites.csv"
    path.write_text(SITES)
    return str(path)


def run(capsys, *arguments: str) -> tuple[int, str, str]:
    code = main(arguments)
    captured = capsys.readouterr()
    return code, captured.out, captured.err


def test_inspect(capsys, pairs):
    code, out, err = run(capsys, "inspect", pairs)
    assert (code, err) == (0, "")
    assert "1000 blocks" in out
    code, out, _ = run(capsys, "inspect", pairs, "--json")
    facts = json.loads(out)
    assert (facts["blocks"], facts["copies"], facts["block_sizes"]) == (1000, 2000, {"2": 1000})


def test_estimate(capsys, pairs):
    code, out, err = run(capsys, "estimate", pairs, "--functional", "renyi:2", "--base", "2", "--json")
    assert (code, err) == (0, "")
    result = json.loads(out)
    assert result["unit"] == "bit"
    assert result["interval"][0] < result["value"] < result["interval"][1]


def test_certify_and_recheck(capsys, pairs, tmp_path):
    saved = str(tmp_path / "certificate.json")
    code, out, err = run(capsys, "certify", pairs, "--at-least", "0.7", "--output", saved)
    assert (code, err) == (0, "")
    assert "The claim (at least 0.7 nat) is met." in out.replace("\n", " ")
    assert run(capsys, "recheck", saved, pairs) == (0, "The certificate follows from this record.\n", "")
    with open(saved, encoding="utf-8") as stream:
        record = DiagramCounts.from_swap(symmetric=700, antisymmetric=300)
        assert Certificate.from_json(stream.read()) == certify(record, at_least=0.7)


def test_claim_that_is_not_certified_has_exit_code_3(capsys, pairs):
    code, out, _ = run(capsys, "certify", pairs, "--at-least", "5")
    assert code == 3
    assert "NOT met" in out


def test_certify_takes_a_plan_and_a_trusted_dimension(capsys, pairs, tmp_path):
    options = ["--anytime", "--planned-blocks", "2:900", "--json"]
    code, out, _ = run(capsys, "certify", pairs, *options)
    assert code == 0
    assert json.loads(out)["tests"][0]["planned"] == {"2": 900}
    large = tmp_path / "large.csv"
    large.write_text("# dim: 3\ndiagram\n600+300+100\n")
    code, out, _ = run(capsys, "certify", str(large), "--trusted-dim", "--at-most", "1.0")
    assert code == 0
    assert "dimension 3" in out


def test_recheck_of_another_record_fails(capsys, pairs, tmp_path):
    saved, other = str(tmp_path / "certificate.json"), tmp_path / "other.csv"
    other.write_text(PAIRS.replace("700", "701"))
    run(capsys, "certify", pairs, "--output", saved)
    code, out, err = run(capsys, "recheck", saved, str(other))
    assert (code, out) == (1, "")
    assert "record_digest" in err


def test_region_of_a_site_record(capsys, sites):
    code, out, _ = run(capsys, "inspect", sites, "--region", "0-1", "--json")
    assert code == 0
    assert (json.loads(out)["blocks"], json.loads(out)["dim"]) == (3, 4)
    code, _, err = run(capsys, "certify", sites)
    assert code == 1
    assert "name a region" in err
    assert run(capsys, "inspect", sites)[0] == 0


def test_standard_input(capsys, monkeypatch):
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(PAIRS.encode())))
    code, out, _ = run(capsys, "certify", "-", "--functional", "purity", "--json")
    assert code == 0
    assert json.loads(out)["unit"] == "1"


def test_demo_shows_the_main_job_and_its_files_pass_the_recheck(capsys, tmp_path):
    code, out, err = run(capsys, "demo", "--save", str(tmp_path))
    assert (code, err) == (0, "")
    for words in ("What was measured", "plug-in", "certificate", "The certificate follows from this record."):
        assert words in out
    assert run(capsys, "recheck", str(tmp_path / "certificate.json"), str(tmp_path / "record.csv"))[0] == 0
    assert sorted(path.name for path in tmp_path.iterdir()) == ["certificate.json", "record.csv"]


def test_packaged_record_is_what_its_script_makes():
    from entropest.demo.make_record import make_record
    from entropest.demo.walk import demo_record

    assert demo_record() == make_record()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("", "empty"),
        ("\x00\x01\x02", "expected"),
        ("colour,number\nred,3\n", "diagram,count"),
        ("diagram,count\n", "below the header"),
        ("diagram,count\n3+1,2\n1+3,1\n", "line 3"),
        ("diagram,count\n3+1,-2\n", "line 2"),
        ("diagram,count\n3+1,1.5\n", "line 2"),
        ("diagram,count\n3+1,nan\n", "line 2"),
        ("diagram,count\n3+1,10000000000000000000000000\n", "line 2"),
        ("# dim: 2\ndiagram,count\n2+1+1,4\n", "line 3"),
        ("swap,count\nsideways,3\n", "line 2"),
    ],
)
def test_bad_files_give_one_line_and_no_result(capsys, tmp_path, text, message):
    path = tmp_path / "bad.csv"
    path.write_bytes(text.encode())
    for command in ("inspect", "estimate", "certify"):
        code, out, err = run(capsys, command, str(path))
        assert (code, out) == (1, "")
        assert err.count("\n") == 1
        assert message in err
        assert "bad.csv" in err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["estimate", "FILE", "--base", "1"], "base"),
        (["estimate", "FILE", "--confidence", "1.5"], "confidence"),
        (["estimate", "FILE", "--functional", "size"], "--functional"),
        (["estimate", "FILE", "--functional", "renyi:two"], "order"),
        (["estimate", "FILE", "--functional", "renyi:-1"], "order"),
        (["estimate", "FILE", "--functional", "purity", "--base", "2"], "base"),
        (["estimate", "FILE", "--method", "guess"], "method"),
        (["estimate", "FILE", "--region", "0"], "--region"),
        (["certify", "FILE", "--anytime", "--drifting"], "cannot both"),
        (["certify", "FILE", "--at-least", "nan"], "at_least"),
        (["certify", "FILE", "--anytime", "--planned-blocks", "many"], "--planned-blocks"),
        (["certify", "FILE", "--trusted-dim"], "dimension"),
        (["certify", "FILE", "--output", "/no/such/folder/c.json"], "No such file"),
        (["recheck", "FILE", "FILE"], "certificate"),
        (["inspect", "/no/such/file.csv"], "No such file"),
    ],
)
def test_bad_options_give_one_line_and_no_result(capsys, pairs, arguments, message):
    code, out, err = run(capsys, *[pairs if argument == "FILE" else argument for argument in arguments])
    assert (code, out) == (1, "")
    assert err.count("\n") == 1
    assert message in err


@pytest.mark.parametrize("arguments", [[], ["dance"], ["certify"], ["certify", "x.csv", "--at-least", "much"]])
def test_usage_errors_have_exit_code_2(capsys, arguments):
    code, out, err = run(capsys, *arguments)
    assert (code, out) == (2, "")
    assert "usage: entropest" in err


def test_every_command_has_help_with_an_example(capsys):
    for command in ("inspect", "estimate", "certify", "recheck", "demo"):
        code, out, _ = run(capsys, command, "--help")
        assert code == 0
        assert "example:" in out


def test_module_runs_and_a_closed_pipe_leaves_no_traceback():
    reader = f"{sys.executable} -m entropest demo | head -n 1"
    done = subprocess.run(["bash", "-c", reader], capture_output=True, text=True, check=True)
    assert done.stdout.startswith("An invented")
    assert done.stderr == ""
