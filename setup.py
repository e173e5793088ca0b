"""Builds kernels/ into offbody._kernels; everything else stands in pyproject.toml."""

import sys
import sysconfig

from setuptools import Extension, setup
from setuptools.command.build_ext import build_ext

try:
    from setuptools.errors import CompileError, LinkError
except ImportError:  # older setuptools
    from distutils.errors import CompileError, LinkError

WINDOWS = sysconfig.get_platform().startswith("win")


class BuildKernels(build_ext):
    """The stock build, with a plain word when no C compiler can be run."""

    def build_extension(self, ext):
        try:
            super().build_extension(ext)
        except (CompileError, LinkError, OSError) as error:
            sys.exit(
                f"offbody's kernels are compiled C and the compiler failed: {error}\n"
                "Install a C compiler and the Python headers, then try again: on Debian or Ubuntu "
                "'apt install gcc python3-dev', on Fedora 'dnf install gcc python3-devel', "
                "on macOS 'xcode-select --install', on Windows the Visual C++ build tools."
            )


def kernel(name, *headers):
    """One extension module, from kernels/ and the headers that it includes."""
    return Extension(
        f"offbody.{name}",
        [f"kernels/{name}.pyx"],
        include_dirs=["kernels"],
        depends=[f"kernels/{header}" for header in headers],
        extra_compile_args=[] if WINDOWS else ["-O3", "-fno-math-errno", "-fno-trapping-math"],
    )


setup(
    ext_modules=[
        kernel("_kernels", "closed_form.h"),
        kernel("_multipole", "closed_form.h", "multipole.h"),
    ],
    cmdclass={"build_ext": BuildKernels},
)
