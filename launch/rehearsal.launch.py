"""The planner with simulated robots: the same planner, the same parameter file, nothing that can be hurt.

    ros2 launch coord_planner rehearsal.launch.py
    ros2 service call /planner/begin/corner_left std_srvs/srv/Trigger
"""

from pathlib import Path

from ament_index_python.packages import get_package_share_directory
from launch import LaunchDescription
from launch.actions import DeclareLaunchArgument, Shutdown
from launch.substitutions import LaunchConfiguration
from launch_ros.actions import LifecycleNode, Node
from launch_ros.parameter_descriptions import ParameterValue


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
            description="true: the simulator publishes /clock and the planner lives by it; false: both use the system's",
        ),
        Node(
            package="coord_planner", executable="simulator_node", name="simulator", namespace=namespace,
            parameters=[params, {"simulation.publish_clock": simulated_time}],
            output="screen", emulate_tty=True, on_exit=Shutdown(reason="the simulator ended"),
        ),
        LifecycleNode(
            package="coord_planner", executable="planner_node", name="planner", namespace=namespace,
            parameters=[params, {"use_sim_time": simulated_time, "activate_on_start": True}],
            output="screen", emulate_tty=True, on_exit=Shutdown(reason="the planner ended"),
            sigterm_timeout="30.0", sigkill_timeout="5.0",
        ),
    ])
