"""What a process of our own does before anything else."""

from __future__ import annotations

import sys
from importlib.abc import MetaPathFinder


class _WithoutPandas(MetaPathFinder):
    @staticmethod
    def find_spec(fullname: str, path: object, target: object = None) -> None:  # noqa: ARG004
        if fullname == "pandas":
            raise ModuleNotFoundError("pandas is not used here", name=fullname)


def leave_out_pandas() -> None:
    """Let no import in this process find pandas.

    pyarrow imports it with the first array it makes, which takes half a second; nothing that runs
    from the command line uses it.  For processes that run no code of the user.
    """
    sys.meta_path.insert(0, _WithoutPandas())
