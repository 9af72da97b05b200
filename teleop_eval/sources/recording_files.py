# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Which data files make up a recording, and how each is opened."""

from __future__ import annotations

import re
from collections.abc import Callable
from pathlib import Path
from tempfile import TemporaryDirectory

import zstandard

from teleop_eval.core.errors import RecordingError
from teleop_eval.sources.bag_metadata import BagMetadata
from teleop_eval.sources.mcap_layout import MAGIC as MCAP_MAGIC
from teleop_eval.sources.mcap_recording import McapFile
from teleop_eval.sources.sqlite_recording import SqliteFile
from teleop_eval.sources.stored_file import Loss, StoredFile

_SUFFIXES = ('.mcap', '.db3', '.mcap.zstd', '.db3.zstd')
_SQLITE_MAGIC = b'SQLite format 3\0'
_ZSTD_MAGIC = b'\x28\xb5\x2f\xfd'
_ROS1_MAGIC = b'#ROSBAG V'
_COPY_SIZE = 1 << 20


def data_files(folder: Path, metadata: BagMetadata, notes: list[str]) -> list[Path]:
    """
    List the data files of a folder in the order of the recording.

    Raises
    ------
    RecordingError
        If there are none.

    """
    named = [folder / name for name in metadata.files]
    found = sorted(
        (path for path in folder.iterdir() if path.name.endswith(_SUFFIXES)),
        key=_natural,
    )
    if named and all(path.is_file() for path in named):
        return named
    if not found:
        raise RecordingError(_nothing_found(folder))
    if named:
        notes.append(
            f'metadata.yaml of {folder.name} names other files than are there '
            f'({", ".join(path.name for path in named[:3])}); '
            f'{", ".join(path.name for path in found[:3])}'
            f'{" ..." if len(found) > 3 else ""} read instead.'
        )
    return found


def open_file(path: Path, metadata: BagMetadata, scratch: Scratch) -> StoredFile:
    """
    Open a data file by what it is, not by its name.

    Raises
    ------
    RecordingError
        If it is not a data file or nothing in it can be read.

    """
    with path.open('rb') as stream:
        head = stream.read(16)
    notes: list[str] = []
    if head.startswith(_ZSTD_MAGIC):
        path = scratch.decompress(path, notes)
        with path.open('rb') as stream:
            head = stream.read(16)
    stored: StoredFile
    if head.startswith(MCAP_MAGIC):
        stored = McapFile(path)
    elif head == _SQLITE_MAGIC:
        counts = metadata.counts if len(metadata.files) == 1 else None
        stored = SqliteFile(path, counts=counts)
    elif not head:
        raise RecordingError(f'{path} is empty; nothing was recorded into it.')
    elif head.startswith(_ROS1_MAGIC):
        raise RecordingError(
            f'{path} is a ROS 1 bag, which is not read; convert it to rosbag2 first.'
        )
    else:
        raise RecordingError(
            f'{path} is neither an MCAP file nor an SQLite database; give a rosbag2 folder, a '
            '.mcap or a .db3 file.'
        )
    stored.notes[:0] = notes
    return stored


class Scratch:
    """A folder for decompressed files, made when needed and removed with the recording."""

    def __init__(self, progress: Callable[[float], None] | None = None) -> None:
        self._folder: TemporaryDirectory[str] | None = None
        self._progress = progress

    def decompress(self, path: Path, notes: list[str]) -> Path:
        """Decompress a zstd file, as far as it goes, and return the plain one."""
        if self._folder is None:
            self._folder = TemporaryDirectory(prefix='teleop_eval_')
        plain = Path(self._folder.name) / path.name.removesuffix('.zstd')
        total = max(path.stat().st_size, 1)
        with path.open('rb') as source, plain.open('wb') as target:
            try:
                whole = True
                frame = zstandard.ZstdDecompressor().decompressobj()
                while piece := source.read(_COPY_SIZE):
                    while piece:
                        target.write(frame.decompress(piece))
                        piece, whole = frame.unused_data, frame.eof
                        if whole:
                            frame = zstandard.ZstdDecompressor().decompressobj()
                    if self._progress:
                        self._progress(source.tell() / total)
            except zstandard.ZstdError:
                whole = False
        if not whole:
            notes.append(Loss(f'{path.name} ends early: its compressed data is cut or damaged.'))
        if plain.stat().st_size == 0:
            raise RecordingError(f'{path} cannot be decompressed; it is cut or damaged.')
        return plain

    def close(self) -> None:
        """Remove the folder."""
        if self._folder is not None:
            self._folder.cleanup()
            self._folder = None


def _natural(path: Path) -> list[tuple[int, str]]:
    """Sort key under which file_10 comes after file_9."""
    parts = re.split(r'(\d+)', path.name)
    return [(int(part), '') if part.isdigit() else (-1, part) for part in parts]


def _nothing_found(folder: Path) -> str:
    inner = sorted(
        path.parent.name for path in folder.glob('*/*') if path.name.endswith(_SUFFIXES)
    )
    if inner:
        return (
            f'The folder {folder} is no recording itself; give one of the folders in it that '
            f'hold one, such as {folder / inner[0]}.'
        )
    what = 'holds no .mcap or .db3 file' if any(folder.iterdir()) else 'is empty'
    return f'The folder {folder} {what}; give the folder that `ros2 bag record` made.'
