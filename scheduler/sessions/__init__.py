"""Sessions: exchange calendar, window and profile in; a grid of stages out."""

from scheduler.sessions.builtin import BUILT_IN, default_profile
from scheduler.sessions.calendar import load_calendar, session_hours, session_on_or_after
from scheduler.sessions.clock import local_texts, planning_time, resolve
from scheduler.sessions.elapsed import volume_between, volume_since
from scheduler.sessions.grid import Grid, Kind, build_grid
from scheduler.sessions.profile import Profile, Row, profile_from_frame

__all__ = [
    "BUILT_IN",
    "Grid",
    "Kind",
    "Profile",
    "Row",
    "build_grid",
    "default_profile",
    "load_calendar",
    "local_texts",
    "planning_time",
    "profile_from_frame",
    "resolve",
    "session_hours",
    "session_on_or_after",
    "volume_between",
    "volume_since",
]
