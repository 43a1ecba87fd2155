"""The live page: the guided run, or the set-up of the patches, in any browser that has the address."""

from sweep.screens.page.beside import Beside, invitation
from sweep.screens.page.frame_page import FramePage
from sweep.screens.page.gate import Door, open_door
from sweep.screens.page.run_page import RunPage

__all__ = ["Beside", "Door", "FramePage", "RunPage", "invitation", "open_door"]
