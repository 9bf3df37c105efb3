"""The virtual cell: two cameras over a bench, rendered with known truth.

A frame comes about in this order: ``workshop`` (the scene) of ``shapes`` with ``texture``; ``cell`` (the rig above it);
``render`` (images and true depth); ``target`` (chessboard views); ``flat`` (views of any board, faster); ``many``
(sequences, on several processes).
"""

from .cell import Cell, make_cell, plane_cell, render_pair
from .flat import FlatRenderer, Sheet, draw_sheet, light_on_board
from .many import render_many, render_pairs
from .render import Light, Motion, Photometry, Scene, cast, render_image, true_depth, visible_from
from .shapes import Ball, Box, Cylinder, Rectangle, Shape
from .target import board_corners, board_poses, board_scene, render_target_views
from .texture import Chessboard, NoiseTexture, Plain, Texture, noise_texture
from .workshop import moved, workshop_scene

__all__ = [
    "Ball",
    "Box",
    "Cell",
    "Chessboard",
    "Cylinder",
    "FlatRenderer",
    "Light",
    "Motion",
    "NoiseTexture",
    "Photometry",
    "Plain",
    "Rectangle",
    "Scene",
    "Shape",
    "Sheet",
    "Texture",
    "board_corners",
    "board_poses",
    "board_scene",
    "cast",
    "draw_sheet",
    "light_on_board",
    "make_cell",
    "moved",
    "noise_texture",
    "plane_cell",
    "render_image",
    "render_many",
    "render_pair",
    "render_pairs",
    "render_target_views",
    "true_depth",
    "visible_from",
    "workshop_scene",
]
