"""`voxelmat fix` on a small design: a new part beside the old one, before and after compared."""

import json

import numpy as np
import pytest

from voxelmat.cli import main
from voxelmat.errors import InputError
from voxelmat.io.store import load_part
from voxelmat.workflow.build import build
from voxelmat.workflow.fix_commands import drain_from_text


@pytest.mark.usefixtures("hollow_pad")
def test_a_drain_is_cut_into_a_new_part(design, tmp_path, capsys):
    out = tmp_path / "out"
    main(["stack", str(design), "--out", str(out), "--quiet"])
    capsys.readouterr()
    words = ["fix", str(out / "stack"), "--design", str(design), "--out", str(out), "--quiet"]
    before = (out / "part.npz").read_bytes()

    assert main([*words, "--json"]) == 0
    alone = json.loads(capsys.readouterr().out)
    assert alone["steps"] == []
    assert any("no drain was chosen" in r["reason"] for r in alone["refused"])
    assert not (out / "part.fixed.npz").exists()

    assert main([*words, "--json", "--drain", "6,4,4:0,1,0:1.5"]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert [s["name"] for s in answer["steps"]] == ["drain"]
    assert answer["findings"]["before"]["sealed cavity"] == 1
    assert "sealed cavity" not in answer["findings"]["after"]
    fixed = load_part(out / "part.fixed.npz", build(design).part.law)
    lost = sum(answer["volumes_mm3"]["before"].values()) - sum(fixed.volumes().values())
    # A round hole of 1.5 mm through a wall of 2 mm.
    assert lost == pytest.approx(np.pi * 0.75**2 * 2, rel=0.25)
    assert (out / "part.npz").read_bytes() == before
    page = (out / "part.fixed.html").read_text()
    assert page.count("<img") == 2

    main([*words, "--drain", "6,4,4:0,1,0:1.5"])
    assert (out / "part.fixed-2.npz").is_file()
    assert "drain: a hole of 1.5 mm" in capsys.readouterr().out


@pytest.mark.usefixtures("hollow_pad")
def test_the_loaded_face_is_not_drilled(design, tmp_path, capsys):
    out = tmp_path / "out"
    main(["stack", str(design), "--out", str(out), "--quiet"])
    capsys.readouterr()
    words = ["fix", str(out / "stack"), "--design", str(design), "--out", str(out), "--quiet"]
    assert main([*words, "--json", "--drain", "6,4,4:0,0,1:1.5"]) == 0
    answer = json.loads(capsys.readouterr().out)
    assert answer["steps"] == []
    assert any("protected surface" in r["reason"] for r in answer["refused"])


@pytest.mark.parametrize("text", ["1,2,3", "1,2:0,0,1", "a,b,c:0,0,1", "1,2,3:0,0,1:2:3"])
def test_a_drain_that_cannot_be_read(text):
    with pytest.raises(InputError, match="x,y,z:dx,dy,dz"):
        drain_from_text(text)
