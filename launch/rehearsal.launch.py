# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The planner with simulated robots: the same planner, the same parameter file, nothing that can be hurt.

    ros2 launch coord_planner rehearsal.launch.py
    ros2 service call /planner/begin/corner_left std_srvs/srv/Trigger
"""

from __future__ import annotations

from pathlib import Path

from ament_index_python.packages import get_package_share_directory
from launch import Action, LaunchContext, LaunchDescription
from launch.actions import DeclareLaunchArgument, Shutdown
from launch.events.process import ProcessExited
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode, Node
from launch_ros.parameter_descriptions import ParameterValue


def end_with(_event: ProcessExited, context: LaunchContext) -> list[Action]:
    """Neither node is of use without the other. (launch takes a second order to shut down for a mistake.)"""
    return [] if context.is_shutdown else [Shutdown(reason="one of the two nodes has ended")]


def generate_launch_description() -> LaunchDescription:
    """Simulator and planner; when either ends, so does the rehearsal."""
    example = Path(get_package_share_directory("coord_planner")) / "config" / "solar_park.yaml"
    params, namespace = LaunchConfiguration("params"), LaunchConfiguration("namespace")
    simulated_time = ParameterValue(LaunchConfiguration("use_sim_time"), value_type=bool)
    return LaunchDescription([
        DeclareLaunchArgument("params", default_value=str(example), description="parameter file of the site (YAML)"),
        DeclareLaunchArgument("namespace", default_value="", description="namespace of the planner and its robots"),
        DeclareLaunchArgument(
            "use_sim_time", default_value="true", choices=["true", "false"],
            description="true: the simulator publishes /clock, the planner lives by it; false: the system clock",
        ),
        Node(
            package="coord_planner", executable="simulator_node", name="simulator", namespace=namespace,
            parameters=[params, {"simulation.publish_clock": simulated_time}],
            output="screen", emulate_tty=True, on_exit=end_with,
        ),
        LifecycleNode(
            package="coord_planner", executable="planner_node", name="planner", namespace=namespace,
            parameters=[params, {"use_sim_time": simulated_time, "activate_on_start": True}],
            output="screen", emulate_tty=True, on_exit=end_with,
            sigterm_timeout="30.0", sigkill_timeout="5.0",
        ),
    ])
