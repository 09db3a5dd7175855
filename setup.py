"""Build from nothing: modules deleted since an earlier build must not come back from ``build/``."""

import shutil

from setuptools import setup
from setuptools.command.build_py import build_py


class FreshBuild(build_py):
    """``build_py`` that first clears its own folder; all else stands in pyproject.toml."""

    def run(self) -> None:
        """Clear, then build."""
        if not self.editable_mode:
            shutil.rmtree(self.build_lib, ignore_errors=True)
        super().run()


setup(cmdclass={"build_py": FreshBuild})
