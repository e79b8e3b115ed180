"""Build of the compiled kernels; everything else is declared in pyproject.toml."""

from pathlib import Path

import numpy
from Cython.Build import cythonize
from setuptools import Extension, setup

CORE = Path("src/sordino/_core")

# No fused multiply-add: derivatives must come out the same on every machine.
EXACT = ["-O3", "-funroll-loops", "-g0", "-ffp-contract=off"]

extensions = [
    Extension(
        f"sordino._core.{source.stem}",
        [source.as_posix()],
        include_dirs=[numpy.get_include(), CORE.as_posix()],
        extra_compile_args=EXACT,
        define_macros=[("NPY_NO_DEPRECATED_API", "NPY_2_0_API_VERSION")],
    )
    for source in sorted(CORE.glob("*.pyx"))
]

setup(
    ext_modules=cythonize(
        extensions,
        build_dir="build/cython",
        compiler_directives={
            "language_level": 3,
            "boundscheck": False,
            "wraparound": False,
            "cdivision": True,
            "initializedcheck": False,
        },
    )
)
