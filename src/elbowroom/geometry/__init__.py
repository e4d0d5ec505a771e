"""Wires, antennas, grounds, layouts, stations, meshes and directions: shapes only, no fields."""
