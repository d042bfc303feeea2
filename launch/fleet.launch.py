# Copyright 2026 coord_planner maintainers
# SPDX-License-Identifier: Apache-2.0

"""The planner for robots in the field.

    ros2 launch coord_planner fleet.launch.py params:=/path/to/site.yaml namespace:=yard

The planner comes up unconfigured and moves nothing: a person configures and activates it (`ros2 lifecycle set`),
unless the parameter file says `activate_on_start: true`, and begins a manoeuvre through its service.
"""

from launch import LaunchDescription
from launch.actions import DeclareLaunchArgument
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode
from launch_ros.parameter_descriptions import ParameterValue


def generate_launch_description() -> LaunchDescription:
    """The planner node and the arguments that a site sets."""
    return LaunchDescription([
        DeclareLaunchArgument("params", description="parameter file of the site (YAML)"),
        DeclareLaunchArgument("namespace", default_value="", description="namespace of the planner and its robots"),
        DeclareLaunchArgument(
            "use_sim_time", default_value="false", choices=["true", "false"],
            description="true: time comes from /clock, as with a simulator or a replayed recording",
        ),
        DeclareLaunchArgument(
            "stop_time", default_value="30.0",
            description="seconds for a stop in step after Ctrl-C; the planner is then told to stop at once",
        ),
        LifecycleNode(
            package="coord_planner", executable="planner_node", name="planner",
            namespace=LaunchConfiguration("namespace"),
            parameters=[
                LaunchConfiguration("params"),
                {"use_sim_time": ParameterValue(LaunchConfiguration("use_sim_time"), value_type=bool)},
            ],
            output="screen", emulate_tty=True,
            sigterm_timeout=LaunchConfiguration("stop_time"), sigkill_timeout="5.0",
        ),
    ])
