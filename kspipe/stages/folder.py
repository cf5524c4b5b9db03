"""The product folder: what was made from what, reuse, and publication only when complete."""

from __future__ import annotations

import hashlib
import json
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, field, fields, is_dataclass
from datetime import UTC, datetime
from pathlib import Path
from typing import Any, Final

from kspipe import __version__
from kspipe.core.errors import Fault, OutputError

__all__ = ["TRIAL_STAGES", "ProductFolder", "file_checksum", "fingerprint"]

MANIFEST: Final = "manifest.json"
# Made from a reduction and its relations: out of date with either.
TRIAL_STAGES: Final = ("budget", "budget_figure", "ladder", "ladder_figure")


def file_checksum(path: Path) -> str:
    """SHA-256 of a file's bytes."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def fingerprint(parts: Mapping[str, Any]) -> str:
    """SHA-256 of a nested structure of plain values, independent of the order of keys."""
    text = json.dumps(parts, sort_keys=True, default=_as_plain)
    return hashlib.sha256(text.encode()).hexdigest()


def _as_plain(value: Any) -> Any:
    """Values, not the way they were typed: ``9`` and ``"9.0"`` are one number."""
    if is_dataclass(value) and not isinstance(value, type):
        return {f.name: getattr(value, f.name) for f in fields(value) if f.compare}
    return str(value)


@dataclass
class ProductFolder:
    """A folder of products with its manifest.

    Attributes
    ----------
    path : Path
    stages : dict
        Per stage its ``fingerprint``, ``outputs`` (checksum by relative path) and ``written``.
    """

    path: Path
    stages: dict[str, dict[str, Any]] = field(default_factory=dict)

    @classmethod
    def open(cls, path: Path) -> ProductFolder:
        """Look at a folder that may not exist yet.

        Raises
        ------
        OutputError
            If it is no folder or its manifest is damaged.
        """
        manifest = path / MANIFEST
        if path.exists() and not path.is_dir():
            raise OutputError(
                Fault(str(path), "is a file; expected a folder", "type another --out")
            )
        if not manifest.is_file():
            return cls(path)
        try:
            stages = json.loads(manifest.read_text(encoding="utf-8"))["stages"]
            for record in stages.values():
                _ = record["fingerprint"], record["outputs"].items()
        except (OSError, ValueError, KeyError, TypeError, AttributeError) as error:
            raise OutputError(
                Fault(str(manifest), f"cannot be read ({error})", "type another --out")
            ) from None
        return cls(path, stages)

    @property
    def is_foreign(self) -> bool:
        """Whether it holds files but no manifest of kspipe."""
        return self.path.is_dir() and not self.stages and any(self.path.iterdir())

    def is_current(self, stage: str, print_: str) -> bool:
        """Whether a stage was made from the same things and its files are untouched."""
        record = self.stages.get(stage)
        return (
            record is not None
            and record["fingerprint"] == print_
            and all(
                (self.path / name).is_file() and file_checksum(self.path / name) == checksum
                for name, checksum in record["outputs"].items()
            )
        )

    def check(self, prints: Mapping[str, str], *, overwrite: bool) -> list[str]:
        """Say which stages must be made.

        Parameters
        ----------
        prints : mapping of str to str
            Fingerprint of each stage that is wanted.
        overwrite : bool
            Whether what differs may be replaced.

        Returns
        -------
        list of str
            Stages that are absent or may be replaced; empty where all can be reused.

        Raises
        ------
        OutputError
            If the folder holds something else and may not be overwritten.
        """
        if self.is_foreign and not overwrite:
            raise OutputError(
                Fault(
                    str(self.path),
                    "the folder is not empty and was not made by kspipe",
                    "type another --out, or --overwrite to write among its files",
                )
            )
        stale = [stage for stage, print_ in prints.items() if not self.is_current(stage, print_)]
        differing = [stage for stage in stale if stage in self.stages]
        if differing and not overwrite:
            raise OutputError(
                Fault(
                    str(self.path),
                    f"holds products made from other inputs, another recipe or another version, "
                    f"or changed since ({', '.join(differing)})",
                    "type --overwrite to replace them, or another --out",
                )
            )
        return stale

    @contextmanager
    def publish(self, prints: Mapping[str, str], *, drop: tuple[str, ...] = ()) -> Iterator[Path]:
        """Give a hidden folder to write into; on success its files get their final names.

        Parameters
        ----------
        prints : mapping of str to str
            Stages written; files belong to the stage whose name their path starts with
            (``match.hi`` owns ``matched/hi.fits``), or to the first stage.
        drop : tuple of str
            Stages whose products are out of date and removed with their files.

        Raises
        ------
        OutputError
            If the folder cannot be written.
        """
        created = [p for p in (self.path, *self.path.parents) if not p.exists()]
        try:
            self.path.mkdir(parents=True, exist_ok=True)
            for left_over in self.path.glob(".unfinished-*"):
                shutil.rmtree(left_over, ignore_errors=True)
            staging = Path(tempfile.mkdtemp(prefix=".unfinished-", dir=self.path))
        except OSError as error:
            raise OutputError(
                Fault(str(self.path), f"cannot be written ({error.strerror})", "type another --out")
            ) from None
        try:
            yield staging
            self._move(staging, prints, drop)
        except OSError as error:
            raise OutputError(Fault(str(self.path), f"cannot be written ({error})")) from error
        finally:
            shutil.rmtree(staging, ignore_errors=True)
            for folder in created:
                if folder.is_dir() and not any(folder.iterdir()):
                    folder.rmdir()

    def _move(self, staging: Path, prints: Mapping[str, str], drop: tuple[str, ...]) -> None:
        written = sorted(p.relative_to(staging) for p in staging.rglob("*") if p.is_file())
        owners: dict[str, dict[str, str]] = {stage: {} for stage in prints}
        with ThreadPoolExecutor(os.cpu_count() or 1) as pool:
            checksums = list(pool.map(file_checksum, (staging / name for name in written)))
        for name, checksum in zip(written, checksums, strict=True):
            owners[_owner(name, prints)][name.as_posix()] = checksum
        replaced = [*drop, *prints]
        old = {name for stage in replaced for name in self.stages.get(stage, {}).get("outputs", {})}
        for name in old - {name.as_posix() for name in written}:
            (self.path / name).unlink(missing_ok=True)
        for name in written:
            (self.path / name.parent).mkdir(parents=True, exist_ok=True)
            (staging / name).replace(self.path / name)
        for stage in drop:
            self.stages.pop(stage, None)
        now = datetime.now(UTC).isoformat(timespec="seconds")
        for stage, print_ in prints.items():
            self.stages[stage] = {
                "fingerprint": print_,
                "outputs": owners[stage],
                "written": now,
            }
        manifest = staging / MANIFEST
        manifest.write_text(
            json.dumps({"kspipe": __version__, "stages": self.stages}, indent=1) + "\n",
            encoding="utf-8",
        )
        manifest.replace(self.path / MANIFEST)


def _owner(name: Path, prints: Mapping[str, str]) -> str:
    if name.parts[0] == "matched" and f"match.{name.stem}" in prints:
        return f"match.{name.stem}"
    return next(stage for stage in reversed(list(prints)) if not stage.startswith("match."))
