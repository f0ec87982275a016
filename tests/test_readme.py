"""The examples of the README run as they stand."""

import re
import shutil
from importlib import resources
from pathlib import Path

README = (Path(__file__).parent.parent / "README.md").read_text(encoding="utf-8")


def test_the_ten_line_start_runs(tmp_path, monkeypatch, capsys):
    with resources.as_file(resources.files("entropest.demo") / "record.csv") as record:
        shutil.copy(record, tmp_path / "cell.csv")
    monkeypatch.chdir(tmp_path)
    (code,) = re.findall(r"```python\n(.*?)```", README, flags=re.DOTALL)
    exec(compile(code, "README.md", "exec"), {})
    out = capsys.readouterr().out
    assert "The von Neumann entropy is at least" in out
    assert (tmp_path / "certificate.json").is_file()


def test_every_shell_command_of_the_readme_is_known(capsys):
    from entropest.cli import main

    commands = set(re.findall(r"^    entropest (\w+)", README, flags=re.MULTILINE))
    assert commands == {"inspect", "estimate", "certify", "recheck"}
    for command in commands:
        assert main([command, "--help"]) == 0
    capsys.readouterr()
