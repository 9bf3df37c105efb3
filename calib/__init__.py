"""All that ends in a saved rig, and the geometry under it. Imports nothing of the node."""

from .camera import Camera
from .errors import CalibrationError, ImageFileError, RigFileError
from .rig import Rig

__all__ = ["CalibrationError", "Camera", "ImageFileError", "Rig", "RigFileError"]
