"""What the build says where it cannot go on."""

import os
import subprocess
import sys
from pathlib import Path

ROOT = Path(__file__).resolve().parent.parent


def test_without_gsl_the_build_names_the_package_to_install(tmp_path):
    """An empty PATH hides pkg-config and gsl-config, as on a machine without GSL's headers."""
    command = [sys.executable, "setup.py", "-q", "build_ext", "--build-temp", tmp_path, "--build-lib", tmp_path]
    run = subprocess.run(command, cwd=ROOT, env={**os.environ, "PATH": str(tmp_path)}, capture_output=True,
                         text=True)
    assert run.returncode != 0
    said = run.stderr.strip().splitlines()[-1]
    for package in ("libgsl-dev (Debian", "gsl-devel (Fedora)", "gsl (Homebrew", "gsl (conda-forge)"):
        assert package in said
    assert list(tmp_path.iterdir()) == []
