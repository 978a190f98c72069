"""What a run was: plan hash, manifest, and the metadata that go into every table."""

from __future__ import annotations

import hashlib
import json
import platform
from copy import deepcopy
from importlib import metadata
from typing import TYPE_CHECKING, Any

from loopint.pipeline.config import config_as_dict

if TYPE_CHECKING:
    from collections.abc import Mapping, Sequence

    from loopint.pipeline.config import RunConfig
    from loopint.pipeline.run_directory import ChunkRecord

# Where files come from and go to, and who does the work, does not change any number.
WITHOUT_EFFECT = {
    "points": ("file",),
    "output": ("directory", "formats"),
    "execution": ("engine", "workers", "scheduler", "chunk_rows"),  # chunk_rows: as used
}

NOT_OF_THE_RUN = ("title", "grid", "comparison", "interpolation")  # read by other commands


def package_version() -> str:
    """Return the version of the installed package."""
    try:
        return metadata.version("loopint")
    except metadata.PackageNotFoundError:
        return "unknown"


def plan_hash(config: RunConfig, input_hashes: Mapping[str, str], chunk_rows: int) -> str:
    """Return the SHA-256 of everything that determines the results of a run.

    These are the config without title, paths, formats and engine, the rows of a chunk, the
    contents of the input files in their order, and the versions of the package and of what its
    numbers rest on.
    """
    relevant = deepcopy(config_as_dict(config))
    for name in NOT_OF_THE_RUN:
        relevant.pop(name, None)
    for section, names in WITHOUT_EFFECT.items():
        for name in names:
            relevant.get(section, {}).pop(name, None)
    content = {
        "versions": decisive_versions(),
        "chunk_rows": chunk_rows,
        "inputs": list(input_hashes.values()),
        "config": relevant,
    }
    return hashlib.sha256(json.dumps(content, sort_keys=True).encode()).hexdigest()


def versions() -> dict[str, str]:
    """Return the versions of the package and of what its numbers rest on."""
    import flint  # noqa: PLC0415 - only for its version

    found = {"loopint": package_version(), "python": platform.python_version()}
    found["FLINT"] = str(flint.__FLINT_VERSION__)
    for name in ("python-flint", "mpmath", "pyarrow"):
        found[name] = metadata.version(name)
    return found


def decisive_versions() -> dict[str, str]:
    """Return the versions that processes working on one table must share."""
    return {name: version for name, version in versions().items() if name != "python"}


def table_metadata(config: RunConfig) -> dict[str, Any]:
    """Return what a table says about itself, apart from its columns."""
    content = config_as_dict(config)
    return {
        "version": package_version(),
        "dimension_convention": "d = dimension - 2 eps",
        "conventions": content["conventions"],
        "accuracy": content["accuracy"],
        "integral": content["integral"],
    }


def manifest_content(
    config: RunConfig,
    plan: str,
    input_hashes: Mapping[str, str],
    records: Sequence[ChunkRecord] | None = None,
    files: Mapping[str, str] | None = None,
) -> dict[str, Any]:
    """Return the content of `manifest.json`; without records, for a run that has just begun.

    `files` gives the SHA-256 of the files beside the table parts, which have theirs in the records.
    """
    content = config_as_dict(config)
    result: dict[str, Any] = {
        "title": content.get("title"),
        "state": "running" if records is None else "finished",
        "plan_hash": plan,
        "versions": versions(),
        "conventions": content["conventions"],
        "inputs": dict(input_hashes),
        "config": content,
    }
    if records is not None:
        result["table"] = [
            {
                "file": f"table/part-{record.index:05d}.parquet",
                "sha256": record.table_sha256,
                "source_rows": record.rows,
                "lines": record.table_lines,
            }
            for record in records
        ]
        result["files"] = dict(files or {})
    return result
