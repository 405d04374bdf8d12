"""Recordings of the live topics (rosbag2 with mcap): written and read without ROS."""

from .bag import Bag
from .reading import NotARecording, read_run
from .topics import Recorded, recorded_topics

__all__ = ["Bag", "NotARecording", "Recorded", "read_run", "recorded_topics"]
