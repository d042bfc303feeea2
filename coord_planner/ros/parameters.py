# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The parameter file as ROS gives it: declared with descriptions and ranges, changed together or not at all."""

from __future__ import annotations

import math
import sys
from collections.abc import Callable, Mapping, Sequence
from typing import Any

from rcl_interfaces.msg import FloatingPointRange, IntegerRange, ParameterDescriptor, SetParametersResult
from rclpy.node import Node
from rclpy.parameter import Parameter

from .. import config
from ..core.parameter import Description
from ..errors import SettingsError

_OF_ROS = ("use_sim_time", "start_type_description_service")
_LARGEST = sys.float_info.max
_LARGEST_WHOLE = 2**63 - 1


def is_of_ros(key: str) -> bool:
    """Whether ROS gives a parameter to every node by itself; the configuration does not know it."""
    return key in _OF_ROS or key.startswith("qos_overrides.")


def given(node: Node) -> dict[str, Any]:
    """What was given to a node at its start, flat dotted keys, without those of ROS itself.

    ROS leaves an empty list of a parameter file unset: it comes back as an empty tuple.
    """
    # rclpy has no public way to see what was given but not declared, and unknown keys must not pass unseen.
    overrides: Mapping[str, Parameter] = node._parameter_overrides
    return {key: () if item.value is None else item.value for key, item in overrides.items() if not is_of_ros(key)}


def files(arguments: Sequence[str]) -> str:
    """Parameter files on a command line, for error messages."""
    pairs = zip(arguments, arguments[1:])
    return ", ".join(value for option, value in pairs if option == "--params-file")


def descriptor(description: Description, kind: str) -> ParameterDescriptor:
    """What the ordinary ROS parameter tools show of a key."""
    unit = f" [{description.unit}]" if description.unit else ""
    message = ParameterDescriptor(
        description=f"{description.text}{unit}",
        additional_constraints=description.allowed(),
        read_only=not description.live,
        dynamic_typing=True,  # so that a whole number is taken for a real; config.changed checks the type
    )
    if kind == "float":
        message.floating_point_range = _real_range(description)
    elif kind == "int":
        message.integer_range = _whole_range(description)
    return message


def _bounded(description: Description) -> bool:
    return any(end is not None for end in (description.minimum, description.maximum, description.above))


def _real_range(description: Description) -> list[FloatingPointRange]:
    if not _bounded(description):
        return []
    lowest = -_LARGEST if description.minimum is None else float(description.minimum)
    if description.above is not None:
        lowest = max(lowest, math.nextafter(description.above, math.inf))
    highest = _LARGEST if description.maximum is None else float(description.maximum)
    return [FloatingPointRange(from_value=lowest, to_value=highest)]


def _whole_range(description: Description) -> list[IntegerRange]:
    if not _bounded(description):
        return []
    lowest = -_LARGEST_WHOLE if description.minimum is None else math.ceil(description.minimum)
    if description.above is not None:
        lowest = max(lowest, math.floor(description.above) + 1)
    highest = _LARGEST_WHOLE if description.maximum is None else math.floor(description.maximum)
    return [IntegerRange(from_value=lowest, to_value=highest)]


def declare(node: Node, flat: Mapping[str, Any], live: bool = True) -> None:
    """Declare every key of the configuration with the value that is in force.

    Args:
        node: gets the parameters. flat: what was given, already found sound by ``config.from_parameters``.
        live: False: none can be changed while the node runs.
    """
    for item in config.declarations(flat):
        shown = descriptor(item.description, item.kind)
        shown.read_only = shown.read_only or not live
        node.declare_parameter(item.key, _as_ros(item.value, item.kind), shown, ignore_override=True)


def _as_ros(value: Any, kind: str) -> Any:
    return list(value) if kind in ("floats", "strs") and value is not None else value


class LiveParameters:
    """Holds the configuration in force and changes it through the ordinary ROS parameter calls.

    Args:
        node: its parameters are declared already.
        configuration: in force at the start.
        refusal: why a sound configuration cannot be taken just now; "" when it can.
        changed: called with the new configuration and the keys that were set, after ROS has taken them.
    """

    def __init__(self, node: Node, configuration: config.Configuration,
                 refusal: Callable[[config.Configuration], str],
                 changed: Callable[[config.Configuration, tuple[str, ...]], None]) -> None:
        self.configuration, self._node = configuration, node
        self._refusal, self._changed = refusal, changed
        node.add_on_set_parameters_callback(self._check)
        node.add_post_set_parameters_callback(self._take)

    def _check(self, items: Sequence[Parameter]) -> SetParametersResult:
        try:
            self._check_clock(items)
            reason = self._refusal(self._new(items))
        except SettingsError as error:
            reason = str(error)
        return SetParametersResult(successful=not reason, reason=reason)

    def _check_clock(self, items: Sequence[Parameter]) -> None:
        for item in items:
            if item.name == "use_sim_time" and item.value != self._node.get_parameter(item.name).value:
                raise SettingsError("the clock cannot be changed while the node runs", key=item.name,
                                    allowed="a new start of the node with it")

    def _take(self, items: Sequence[Parameter]) -> None:
        keys = tuple(item.name for item in items if not is_of_ros(item.name))
        if keys:
            self.configuration = self._new(items)
            self._changed(self.configuration, keys)

    def _new(self, items: Sequence[Parameter]) -> config.Configuration:
        ours = [item for item in items if not is_of_ros(item.name)]
        for item in ours:
            if item.value is None:
                raise SettingsError("cannot be taken away while the planner runs", key=item.name, allowed="a new value")
        updates = {item.name: item.value for item in ours}
        return config.changed(self.configuration, updates) if updates else self.configuration
