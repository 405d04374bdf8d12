"""launch_testing description: allocator.launch.py, with and without autostart."""

import unittest

import launch_testing
import launch_testing.asserts
from launch import LaunchDescription
from launch_testing.actions import ReadyToTest
from watching import Watcher, included

NAMESPACE, RATE = "site_7", 4.0


@launch_testing.parametrize("autostart", ["true", "false"])
def generate_test_description(autostart):
    arguments = {"namespace": NAMESPACE, "rate": str(RATE), "autostart": autostart}
    return LaunchDescription([included("allocator.launch.py", arguments), ReadyToTest()])


class TestWhileRunning(unittest.TestCase):
    def test_state_and_parameters(self, autostart):
        with Watcher(f"/{NAMESPACE}/allocator") as watcher:
            if autostart == "true":
                watcher.wait_for(lambda: watcher.state() == "active")
            else:
                watcher.wait_for(lambda: watcher.state() == "unconfigured")
                self.assertEqual(watcher.state_after(2.0), "unconfigured")
            self.assertEqual(watcher.parameter("rate").double_value, RATE)


@launch_testing.post_shutdown_test()
class TestAfterwards(unittest.TestCase):
    def test_everything_ended_well(self, proc_info):
        launch_testing.asserts.assertExitCodes(proc_info)
