"""The virtual cell for tests: the same one for the same wishes, since laying out its textures takes half a second."""

from functools import cache

from skewline.tools import cell

make_cell = cache(cell.make_cell)
