"""launch_testing description: demo.launch.py, the simulated team and the allocator."""

import unittest

import launch_testing
import launch_testing.asserts
from launch import LaunchDescription
from launch_testing.actions import ReadyToTest
from watching import Watcher, included


def generate_test_description():
    return LaunchDescription([included("demo.launch.py", {}), ReadyToTest()])


class TestWhileRunning(unittest.TestCase):
    def test_robots_get_tasks_and_move(self):
        with Watcher("/allocator") as watcher:
            watcher.wait_for(lambda: watcher.state() == "active")
            watcher.wait_for(lambda: len(watcher.busy_robots()) >= 2)
            robot = watcher.busy_robots()[0]
            watcher.wait_for(lambda: watcher.travelled(robot) > 0.5)


@launch_testing.post_shutdown_test()
class TestAfterwards(unittest.TestCase):
    def test_everything_ended_well(self, proc_info):
        launch_testing.asserts.assertExitCodes(proc_info)
