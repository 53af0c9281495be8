"""`voxelmat lab`: the notebook it makes, the command it runs, what it refuses."""

import json

import nbformat
import pytest

from voxelmat.cli import main
from voxelmat.errors import InputError
from voxelmat.workflow.lab import app_command, lab_command, working_notebook


def test_the_notebook_is_valid_and_never_replaced(design):
    path = working_notebook(design)
    book = nbformat.read(path, as_version=4)
    nbformat.validate(book)
    assert "Change this first" in book.cells[0].source
    assert "'design.toml'" in book.cells[0].source
    path.write_text("mine")
    assert working_notebook(design).read_text() == "mine"


def test_it_serves_the_loopback_address_with_the_token_on(design, capsys):
    assert main(["lab", str(design), "--dry-run", "--no-browser", "--port", "8899", "--json"]) == 0
    said = json.loads(capsys.readouterr().out)
    command = said["command"]
    assert "--ServerApp.ip=127.0.0.1" in command
    assert "--no-browser" in command
    assert not any("token" in word or "password" in word for word in command)  # Jupyter's own: on
    assert f"--ServerApp.root_dir={design.parent}" in command
    assert "--no-browser" not in lab_command(design.with_suffix(".ipynb"))


def test_a_new_design_may_be_begun_and_bad_ones_are_named(tmp_path, capsys):
    assert working_notebook(tmp_path / "new.toml").exists()
    with pytest.raises(InputError, match=r"ends in \.toml"):
        working_notebook(tmp_path / "part.stl")
    with pytest.raises(InputError, match="no folder"):
        working_notebook(tmp_path / "nowhere" / "new.toml")
    (tmp_path / "bad.toml").write_text("= no")
    assert main(["lab", str(tmp_path / "bad.toml"), "--dry-run"]) == 3
    assert "bad.toml" in capsys.readouterr().err


def test_the_app_is_served_in_the_same_way_or_says_what_to_install(design, capsys, monkeypatch):
    args = ["lab", str(design), "--app", "--dry-run", "--no-browser", "--port", "8899", "--json"]
    assert main(args) == 0
    command = json.loads(capsys.readouterr().out)["command"]
    assert command[2] == "voila"
    assert "--Voila.ip=127.0.0.1" in command
    assert "--Voila.auto_token=True" in command
    assert "--Voila.port=8899" in command
    monkeypatch.setattr("importlib.util.find_spec", lambda name: None)
    with pytest.raises(InputError, match=r"pip install 'voxelmat\[app\]'"):
        app_command(design.with_suffix(".ipynb"))
