"""Frames on disk, both ways: loose folders and recordings are read by one reader, recordings written by one writer.

A recording is a loose folder (images and `shots.csv`) plus `station.toml` and, once it has ended, `recording.json`
(docs/station-file.md).
"""

from sweep.recording.folder import FolderSource, open_source
from sweep.recording.recorder import Recorder, record_into
from sweep.recording.shots import load_station

__all__ = ["FolderSource", "Recorder", "load_station", "open_source", "record_into"]
