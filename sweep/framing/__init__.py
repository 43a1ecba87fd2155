"""Pointing the camera and placing the patches: what each patch shows in one live frame, and what to do about it."""

from sweep.framing.check import check_patch, check_patches, light_tone
from sweep.framing.records import Done, Figure, Move, PatchCheck, Revert, Save, Show, Sight, Status, Wish, Work
from sweep.framing.regions import patches_of, with_region, write_regions

__all__ = [
    "Done",
    "Figure",
    "Move",
    "PatchCheck",
    "Revert",
    "Save",
    "Show",
    "Sight",
    "Status",
    "Wish",
    "Work",
    "check_patch",
    "check_patches",
    "light_tone",
    "patches_of",
    "with_region",
    "write_regions",
]
