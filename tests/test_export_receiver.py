"""A receiver needs a handful of libraries, no network, and leaves no trace."""

from __future__ import annotations

import importlib.metadata
import os
import re
import shutil
import subprocess
import sys
import sysconfig
import venv
from pathlib import Path

import pytest

import learnclosure
from closures_cases import mean_state
from export_cases import export
from learnclosure.export.archive import write_archive
from learnclosure.export.gate import load_bundle
from learnclosure.quantities import MEAN_STATE

LIGHT = ("numpy", "onnx", "onnxruntime", "click", "rich", "h5netcdf", "h5py")
"""What stands beside ``pip install --no-deps learnclosure``."""
COMMAND = "from learnclosure.cli import main\nmain()\n"
WATCH = Path(__file__).with_name("no_network.py")
CANNOT_WATCH = 77
BAD_SYSTEM_CALL = -31


def with_requirements(names):
    """Return distributions and all they require without extras."""
    found, waiting = set(), list(names)
    while waiting:
        name = re.sub(r"[-_.]+", "-", waiting.pop()).lower()
        if name in found:
            continue
        found.add(name)
        for line in importlib.metadata.requires(name) or ():
            requirement, _, condition = line.partition(";")
            if "extra" not in condition:
                waiting.append(re.match(r"[A-Za-z0-9._-]+", requirement)[0])
    return sorted(found)


def install(name, site):
    """Link the files of an installed distribution into another environment."""
    home = Path(sysconfig.get_paths()["purelib"])
    tops = {entry.parts[0] for entry in importlib.metadata.files(name) if ".." not in entry.parts}
    for top in tops - {"__pycache__"}:
        (site / top).symlink_to(home / top)


@pytest.fixture(scope="module")
def receiver(tmp_path_factory):
    """Make an environment with the light libraries and this package, and nothing else."""
    home = tmp_path_factory.mktemp("receiver")
    venv.EnvBuilder(symlinks=True, with_pip=False).create(home)
    site = next(home.glob("lib/python3*/site-packages"))
    for name in with_requirements(LIGHT):
        install(name, site)
    package = Path(learnclosure.__file__).parent
    shutil.copytree(package, site / "learnclosure", ignore=shutil.ignore_patterns("__pycache__"))
    return home


@pytest.fixture(scope="module")
def shipped(tmp_path_factory):
    folder = tmp_path_factory.mktemp("shipped")
    export(folder / "bundle", "mean-field", "mlp")
    write_archive(load_bundle(folder / "bundle").files, folder / "bundle.zip")
    state = mean_state("maple", 0.35, 70e3, 350.0)
    for name, quantity in MEAN_STATE.items():
        state[name].attrs["units"] = quantity.units
    state.to_netcdf(folder / "means.nc", engine="h5netcdf")
    (folder / "command.py").write_text(COMMAND)
    return folder


def run(receiver, shipped, *words, watch=False, home=None):
    """Run a command in the light environment with nothing inherited from this one."""
    command = [receiver / "bin" / "python", *([WATCH] if watch else []), shipped / "command.py"]
    environment = {"PATH": os.environ["PATH"], "HOME": str(home or receiver), "COLUMNS": "200"}
    return subprocess.run(
        [str(word) for word in (*command, *words)],
        capture_output=True,
        text=True,
        env=environment,
        cwd=receiver,
        check=False,
    )


def test_the_light_environment_holds_nothing_else(receiver):
    for name in ("sklearn", "scipy", "xarray", "pydantic", "numba", "pandas", "joblib", "jinja2"):
        words = [str(receiver / "bin" / "python"), "-c", f"import {name}"]
        done = subprocess.run(words, capture_output=True, text=True, env={}, check=False)
        assert f"No module named '{name}'" in done.stderr


@pytest.mark.parametrize("form", ["bundle", "bundle.zip"])
def test_a_light_installation_verifies_and_predicts(receiver, shipped, tmp_path, form):
    done = run(receiver, shipped, "verify", shipped / form)
    assert done.returncode == 0, done.stderr
    assert "verified" in done.stdout
    target = tmp_path / "out.nc"
    done = run(receiver, shipped, "predict", shipped / form, shipped / "means.nc", target)
    assert done.returncode == 0, done.stderr
    assert target.is_file()


def test_a_light_installation_compares(receiver, shipped):
    done = run(receiver, shipped, "compare", shipped / "bundle", shipped / "bundle.zip")
    assert done.returncode == 0, done.stderr


def test_the_watch_sees_a_socket_and_lets_local_ones_be(tmp_path):
    script = tmp_path / "script.py"
    for family, code in (("AF_UNIX", 0), ("AF_INET", BAD_SYSTEM_CALL), ("AF_INET6", -31)):
        script.write_text(f"import socket\nsocket.socket(socket.{family})\n")
        done = subprocess.run([sys.executable, WATCH, script], capture_output=True, check=False)
        if done.returncode == CANNOT_WATCH:
            pytest.skip("this kernel filters no system calls")
        assert done.returncode == code


def test_no_socket_is_opened_and_no_trace_left_at_home(receiver, shipped, tmp_path):
    # Builds of onnxruntime that report usage open sockets and write a queue below the home folder.
    for words in (
        ("verify", shipped / "bundle"),
        ("predict", shipped / "bundle.zip", shipped / "means.nc", tmp_path / "out.nc"),
    ):
        home = tmp_path / words[0]
        home.mkdir()
        done = run(receiver, shipped, *words, watch=True, home=home)
        if done.returncode == CANNOT_WATCH:
            pytest.skip("this kernel filters no system calls")
        assert done.returncode == 0, done.stderr
        assert not list(home.rglob("*"))
