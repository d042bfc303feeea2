"""The tick solver: condensed semismooth Newton steps on the same problem that ocp.py states. Plain numpy."""
