"""The commands of ``coord-planner``, one module each."""
