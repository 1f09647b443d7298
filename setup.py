"""Builds limen._core from csrc/ against NumPy and GSL; everything that is not compilation stands in pyproject.toml."""

import os
import re
import shutil
import subprocess
from concurrent.futures import ThreadPoolExecutor
from glob import glob

import numpy
from setuptools import Extension, setup
from setuptools.command.build_ext import build_ext

NO_GSL = (
    "limen needs the GNU Scientific Library, 2.7 or newer, with its headers: install libgsl-dev (Debian, Ubuntu), "
    "gsl-devel (Fedora), gsl (Homebrew on macOS) or gsl (conda-forge)."
)


def gsl_flags():
    """Compile and link flags of GSL from pkg-config or gsl-config, whichever knows it first."""
    for command, version, arguments in (("pkg-config", ["--modversion", "gsl"], ["--cflags", "--libs", "gsl"]),
                                        ("gsl-config", ["--version"], ["--cflags", "--libs"])):
        if shutil.which(command) is None:
            continue
        asked = subprocess.run([command, *version], capture_output=True, text=True)
        found = re.match(r"(\d+)\.(\d+)", asked.stdout)
        if asked.returncode == 0 and found and tuple(map(int, found.groups())) >= (2, 7):
            flags = subprocess.run([command, *arguments], capture_output=True, text=True, check=True).stdout.split()
            linked = [flag for flag in flags if flag.startswith(("-l", "-L"))]
            return [flag for flag in flags if flag not in linked], linked
    raise SystemExit(NO_GSL)


class BuildSideBySide(build_ext):
    """Compiles the files of the extension side by side, where setuptools goes one by one."""

    def build_extensions(self):
        compile_these = self.compiler.compile

        def side_by_side(sources, *args, **kwargs):
            with ThreadPoolExecutor(os.cpu_count()) as pool:
                objects = pool.map(lambda source: compile_these([source], *args, **kwargs), sources)
                return [name for names in objects for name in names]

        self.compiler.compile = side_by_side
        super().build_extensions()


with open("csrc/limen.h", encoding="utf-8") as header:
    version = re.search(r'#define LM_VERSION "([^"]+)"', header.read()).group(1)
compile_flags, link_flags = gsl_flags()
strict = ["-Werror"] if os.environ.get("LIMEN_STRICT") else []

core = Extension(
    "limen._core",
    sources=sorted(glob("csrc/*/*.c")),
    depends=sorted(glob("csrc/*.h") + glob("csrc/*/*.h")),
    include_dirs=[numpy.get_include(), "csrc"],
    define_macros=[
        ("LM_HIDDEN", "1"),
        ("NPY_NO_DEPRECATED_API", "NPY_1_7_API_VERSION"),
        ("NPY_TARGET_VERSION", "NPY_2_0_API_VERSION"),
        ("PY_ARRAY_UNIQUE_SYMBOL", "lm_numpy_array"),
        ("PY_UFUNC_UNIQUE_SYMBOL", "lm_numpy_ufunc"),
    ],
    extra_compile_args=[
        "-std=c17", "-O3", "-ffp-contract=off", "-fno-math-errno", "-fvisibility=hidden",
        "-Wall", "-Wextra", "-Wconversion", "-Wshadow", *strict, *compile_flags,
    ],
    extra_link_args=[*link_flags, "-lm", "-lpthread"],
)
setup(version=version, ext_modules=[core], cmdclass={"build_ext": BuildSideBySide})
