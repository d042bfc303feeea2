# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Clearances of pairs and fences, and the wrenches with which they pull at their robots: clearance.py as kernels."""

from __future__ import annotations

import math

from ..clearance import _SQUARE
from .compiled import inner
from .fields import LENGTH, NODE_COS, NODE_SIN, OFFSET_X, OFFSET_Y, SECOND, WIDTH, X0, Y0, X, Y


@inner
def shadow(length, width, along, across):
    """Half of what a footprint shows on a line, its slope by the heading, and its second derivative."""
    long, wide = math.sqrt(along * along + _SQUARE), math.sqrt(across * across + _SQUARE)
    bent = length * (_SQUARE * across * across / (long * long) - along * along) / long
    bent += width * (_SQUARE * along * along / (wide * wide) - across * across) / wide
    return length * long + width * wide, along * across * (length / long - width / wide), bent


@inner
def look(pairs, lines, foot, robot, roll, clear, wrench, bent):
    """Fill clearances (P, M), their wrenches on both robots (2, 3, P, M) and the shadows' bending (2, P, M).

    A wrench: force in x and in y, and the torque about the robot's first place, of a unit push of the row.
    """
    for p in range(clear.shape[0]):
        first, second, counts = pairs[p, 0], pairs[p, 1], foot[SECOND, p]
        for i in range(clear.shape[1]):
            normal_x, normal_y = lines[0, p, i], lines[1, p, i]
            total = -lines[2, p, i]
            for side in range(2):
                k = second if side else first
                sign = counts if side else -1.0
                cos, sin = roll[NODE_COS, k, i], roll[NODE_SIN, k, i]
                along, across = normal_x * cos + normal_y * sin, normal_y * cos - normal_x * sin
                shown, growing, bends = shadow(foot[LENGTH + side, p], foot[WIDTH + side, p], along, across)
                offset_x, offset_y = foot[OFFSET_X + side, p], foot[OFFSET_Y + side, p]
                x, y = roll[X, k, i + 1], roll[Y, k, i + 1]
                total += sign * (normal_x * x + normal_y * y + offset_x * along + offset_y * across) - shown
                force_x, force_y = sign * normal_x, sign * normal_y
                wrench[side, 0, p, i], wrench[side, 1, p, i] = force_x, force_y
                twist = sign * (offset_x * across - offset_y * along) - growing
                wrench[side, 2, p, i] = twist + force_y * (x - robot[X0, k]) - force_x * (y - robot[Y0, k])
                bent[side, p, i] = bends
            clear[p, i] = total
