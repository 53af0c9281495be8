"""Check sums beside a stack: as sha256sum reads them, and as the script on the printer does."""

import ast
import json
import os
import re
import shutil
import subprocess
import sys
from pathlib import Path

import pytest
from print_twins import layered_part

from voxelmat.model.image import ImageLayout
from voxelmat.printing import check_stack
from voxelmat.printing.preflight import preflight
from voxelmat.printing.profile import load_profile
from voxelmat.printing.stack import write_stack
from voxelmat.printing.sums import CHECKER, SUMS

STANDARD = load_profile("invented-standard")
KINDS = {
    "png bitmap": ImageLayout(),
    "png index": ImageLayout(kind="png index"),
    "tiff pages": ImageLayout(kind="tiff pages", pad_to=(8, 64)),
}


@pytest.fixture(scope="module", params=list(KINDS))
def written(request, tmp_path_factory):
    folder = tmp_path_factory.mktemp("sums") / "stack"
    part = layered_part("distance", shape=(6, 5, 3), pure=True)
    write_stack(part, STANDARD.replace(image=KINDS[request.param]), folder, threads=1)
    return folder


@pytest.fixture
def stack(written, tmp_path):
    return Path(shutil.copytree(written, tmp_path / "copy"))


def run(folder):
    """The script as the print room starts it: its own copy, another folder, no packages of ours."""
    return subprocess.run(
        [sys.executable, "-I", "-S", str(folder / CHECKER)],
        capture_output=True, text=True, cwd="/", timeout=60, check=False,
    )  # fmt: skip


def test_sha256sum_accepts_the_file(stack):
    # sha256sum of the GNU core utilities, an independent reader of the format.
    done = subprocess.run(
        ["sha256sum", "--check", "--strict", SUMS],
        cwd=stack, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == 0, done.stdout + done.stderr
    listed = {line.split("  ")[1] for line in (stack / SUMS).read_text().splitlines()}
    there = {p.relative_to(stack).as_posix() for p in stack.rglob("*") if p.is_file()}
    assert there - listed == {SUMS, CHECKER}
    assert "manifest.json" in listed


def test_a_whole_stack_passes(stack):
    done = run(stack)
    assert done.returncode == 0, done.stdout + done.stderr
    image = json.loads((stack / "manifest.json").read_text())["image"]
    assert f"of {image['width']} x {image['height']} pixels" in done.stdout
    assert not [f for f in preflight(stack) if f.code == "extra files"]


def first_image(folder):
    return sorted(p for p in folder.rglob("*") if p.suffix in (".png", ".tif"))[0]


def turn_a_bit(stack):
    data = bytearray(first_image(stack).read_bytes())
    data[-20] ^= 1
    first_image(stack).write_bytes(data)


def other_size(stack):
    """An image of another size whose check sum has been put right."""
    path = first_image(stack)
    data = bytearray(path.read_bytes())
    if path.suffix == ".png":
        data[19] ^= 1
    else:
        at = data.find(b"\x00\x01\x04\x00\x01\x00\x00\x00")
        assert at > 0
        data[at + 8] ^= 1
    path.write_bytes(data)
    text = (stack / SUMS).read_text().splitlines()
    name = path.relative_to(stack).as_posix()
    fresh = check_stack.digest(path)
    text = [f"{fresh}  {name}" if line.endswith(f"  {name}") else line for line in text]
    (stack / SUMS).write_text("\n".join(text) + "\n")


def strike_out(stack):
    name = first_image(stack).relative_to(stack).as_posix()
    lines = (stack / SUMS).read_text().splitlines()
    (stack / SUMS).write_text("\n".join(x for x in lines if not x.endswith(name)) + "\n")


def lead_out(stack):
    path = first_image(stack)
    outside = stack.parent / "elsewhere"
    path.rename(outside)
    path.symlink_to(outside)


@pytest.mark.parametrize(
    ("harm", "said"),
    [
        (lambda s: first_image(s).unlink(), "is missing"),
        (lambda s: os.truncate(first_image(s), 40), "is not the file that was written"),
        (turn_a_bit, "is not the file that was written"),
        (other_size, "pixels; it should be"),
        (strike_out, "images; manifest.json says"),
        (lead_out, "leads out of the stack"),
        (lambda s: (s / "99999.png").write_bytes(b"x"), "does not belong to the stack"),
        (lambda s: (s / "manifest.json").write_text("{}"), "missing or damaged"),
    ],
)
def test_what_is_wrong_is_named(stack, harm, said):
    harm(stack)
    done = run(stack)
    assert done.returncode == 1, done.stdout + done.stderr
    assert said in done.stdout
    assert done.stderr == ""


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "lists nothing"),
        ("nonsense\n", "is not 'SHA-256  path'"),
        ("0" * 64 + "  ../../etc/passwd\n", "outside the stack"),
        ("0" * 64 + "  /etc/passwd\n", "outside the stack"),
        ("0" * 64 + "  C:\\x\n", "outside the stack"),
        ("0" * 64 + "  a\n" + "0" * 64 + "  a\n", "twice"),
        ("0" * 64 + "  a\n", "does not list manifest.json"),
    ],
)
def test_sums_that_are_no_use(stack, text, said):
    (stack / SUMS).write_text(text)
    done = run(stack)
    assert done.returncode == 2, done.stdout + done.stderr
    assert said in done.stdout


def test_the_script_needs_only_an_old_python():
    text = Path(check_stack.__file__).read_text("utf-8")
    tree = ast.parse(text, feature_version=(3, 8))
    names = {n.names[0].name for n in ast.walk(tree) if isinstance(n, ast.Import)}
    names |= {n.module for n in ast.walk(tree) if isinstance(n, ast.ImportFrom)}
    assert names <= sys.stdlib_module_names
    newer = r"\.is_relative_to\(|removeprefix|removesuffix|file_digest|zip\(.*strict|tomllib"
    assert not re.search(newer, text)
