# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""Two mends to lifecycle nodes of rclpy, measured on Jazzy."""

from __future__ import annotations

import functools
import traceback
from collections.abc import Callable
from typing import Any, TypeVar

from rclpy.lifecycle import LifecycleNode, LifecycleState, TransitionCallbackReturn

from ..errors import CoordPlannerError

_Node = TypeVar("_Node", bound=LifecycleNode)
_Transition = Callable[[_Node, LifecycleState], TransitionCallbackReturn]


def logged(transition: _Transition[_Node]) -> _Transition[_Node]:
    """Log what a transition raises, and let it fail; rclpy would swallow it without a word."""

    @functools.wraps(transition)
    def guarded(node: _Node, state: LifecycleState) -> TransitionCallbackReturn:
        try:
            return transition(node, state)
        except CoordPlannerError as error:
            node.get_logger().error(str(error))
        except Exception:
            node.get_logger().error(f"{transition.__name__} failed:\n{traceback.format_exc()}")
        return TransitionCallbackReturn.FAILURE

    return guarded


def answer_invalid_transitions(node: LifecycleNode) -> None:
    """Answer "no" to a transition that the state does not allow.

    On Jazzy the service raises instead: the executor stops and the caller waits for ever.
    """
    service = node._service_change_state
    ask = service.callback

    def guarded(request: Any, response: Any) -> Any:
        try:
            return ask(request, response)
        except Exception as error:  # RCLError, which has no public name
            node.get_logger().warning(f"no such transition from the state that the node is in: {error}")
            response.success = False
            return response

    service.callback = guarded
