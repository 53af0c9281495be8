"""``voxelmat stack --workers`` and ``--scheduler`` write what one process writes."""

from __future__ import annotations

import json

from voxelmat import cli


def shell(capsys, *words):
    code = cli.main([*map(str, words), "--json", "--quiet"])
    return code, json.loads(capsys.readouterr().out)


def digests(folder):
    manifest = json.loads((folder / "manifest.json").read_text())
    return [c["sha256"] for c in manifest["channels"]]


def test_two_workers_from_the_shell(design, tmp_path, capsys):
    for out, words in (("one", ()), ("two", ("--workers", 2))):
        code, data = shell(capsys, "stack", design, "--out", tmp_path / out, *words)
        assert code in (0, 2), data
    assert digests(tmp_path / "one" / "stack") == digests(tmp_path / "two" / "stack")


def test_workers_that_cannot_be(design, tmp_path, capsys):
    code, data = shell(capsys, "stack", design, "--out", tmp_path / "out", "--workers", 0)
    assert code == 3
    assert data["key"] == "workers"
    assert not (tmp_path / "out").exists()
    assert cli.main(["run", str(design), "--workers", "many"]) == 3
    capsys.readouterr()


def test_no_scheduler_there(design, tmp_path, capsys, monkeypatch):
    monkeypatch.setattr("voxelmat.printing.workers.ANSWER_WITHIN", 1.0)
    words = ("--scheduler", "tcp://127.0.0.1:9")
    code, data = shell(capsys, "stack", design, "--out", tmp_path / "out", *words)
    assert code == 4
    assert "No dask.distributed scheduler answers" in data["error"]
