"""Recordings with known truth: droplets, camera and file of a simulated bench."""

from tracker.simulate.make import Logger, Simulated, bench_text, simulate, write_bench, write_log
from tracker.simulate.scene import Scene, read_assignments, read_scene, scene_from_mapping
from tracker.simulate.text import scene_text

__all__ = [
    "Logger",
    "Scene",
    "Simulated",
    "bench_text",
    "read_assignments",
    "read_scene",
    "scene_from_mapping",
    "scene_text",
    "simulate",
    "write_bench",
    "write_log",
]
