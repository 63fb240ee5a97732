"""Pictures to check a fit by, drawn offscreen; PyVista is imported only when one is drawn."""

from __future__ import annotations

from condyle.viz.contact_sheet import draw_contact_sheet
from condyle.viz.frame_figures import best_row, typical_row, worst_row
from condyle.viz.model_sheet import draw_model_sheet
from condyle.viz.overlays import draw_overlay, overlay_camera, picture_kind, save_picture
from condyle.viz.viewpoint import Camera

__all__ = [
    "Camera",
    "best_row",
    "draw_contact_sheet",
    "draw_model_sheet",
    "draw_overlay",
    "overlay_camera",
    "picture_kind",
    "save_picture",
    "typical_row",
    "worst_row",
]
