"""Wrong files: each with the exact line, key path, finding and demand the user is shown."""

from __future__ import annotations

import re

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from allocator_node.files import plugins
from allocator_node.files.document import DEEPEST, LARGEST_FILE, MOST_VALUES, FileError
from allocator_node.sim.world_file import World, parse_world, read_world
from allocator_node.tasks import Visit
from allocator_node.team import Team
from allocator_node.team_file import merge_tasks, parse_team, read_team

KINDS = "cover, encircle, follow, formation, patrol, sweep, visit, watch"

TEAM = '''\
frame: site
boundary: [[0, 0], [80, 0], [80, 50], [0, 50]]
keep_out:
  - {name: shed, polygon: [[30, 20], [36, 20], [36, 24], [30, 24]]}
capabilities:
  scan:
    - {with: [camera, gimbal]}
    - {with: [camera], grade: 0.6}
  rough: [{with: [tracks]}]
robots:
  rover_1:
    drive: {model: differential, max_speed: 1.2}
    radius: 0.45
    features: [camera, gimbal]
    battery: {capacity_wh: 480, reserve: 0.2}
    dock: [2, 2]
    start: [4, 3, 0]
    pose: {topic: rover_1/odom}
    command: {topic: rover_1/cmd_vel}
    battery_topic: rover_1/battery
    health: [{name: "rover_1: camera", feature: camera}]
  drone_1:
    drive: {model: aerial, max_speed: 3, height: [4, 8]}
    start: [8, 3, 0]
tasks:
  rows:
    kind: patrol
    waypoints: [[10, 40], [70, 40]]
    needs: {scan: 1.0}
    robots: {min: 1, max: 2}
  look:
    kind: visit
    at: [20, 10]
    dwell: 5
  guard:
    kind: watch
    at: [50, 10]
    after: [look]
'''

WORLD = '''\
noise: {position_m: 0.02, heading_rad: 0.01}
ground:
  - {name: mud, circle: [55, 41, 6], keeps: 0.05, affects: [camera]}
events:
  - {at: 40, robot: rover_1, feature: camera, level: error}
  - {at: 60, robot: rover_1, pose: silent}
  - {at: 80, robot: drone_1, battery: 0.18}
  - {at: 90, robot: drone_1, stalled: true}
  - {at: 95, task: rows, active: false}
  - {at: 99, task: guard, move: [60, 10]}
'''

BAD_TEAMS = [
    ("frame: site", "- frame: site\n...\n---",
     "1: found a list with 1 entry; must be a mapping (key: value)",
     "3: found a second document; must be one document: take out everything from the '---' on"),
    ("frame: site", "fame: site",
     "1: fame: found an unknown key; must be one of boundary, capabilities, frame, keep_out, "
     "robots, tasks (did you mean frame?)"),
    ("frame: site", "frame: /site",
     '1: frame: found the text "/site"; must not start with a slash (tf2 refuses that)'),
    ("frame: site", "frame: 7",
     "1: frame: found 7; must be text: put it in quotes"),
    ("frame: site", 'frame: ""',
     '1: frame: found the text ""; must not be empty'),
    ("frame: site", "frame: site\nframe: map",
     "2: frame: found the key again; must be there once (the first is in line 1)"),
    ("frame: site", "frame: !!str site",
     '1: frame: found the tag "tag:yaml.org,2002:str"; must be written without a tag'),
    ("frame: site", "frame: *site",
     "1: frame: found the alias *site; must stand after the value that is marked &site"),
    ("frame: site", "? [frame]\n: site",
     "1: found a key that is a list, mapping or alias; must be text"),
    ("frame: site", "1: site",
     "1: found the key 1; must be text: put it in quotes (the decimal sign of a number is a "
     "point, no comma)"),
    ("frame: site", "<<: {frame: site}",
     "1: found the merge key <<; must be left out: write the keys themselves"),
    ("frame: site", "frame: [[[[[[[[[[[[[[[[[[[[1]]]]]]]]]]]]]]]]]]]]",
     "1: found more than 16 levels within each other; must be written flatter"),
    ("frame: site", "frame: site\x07",
     "1: found the control character U+0007; must be taken out: a YAML file is plain text"),
    ("frame: site", "frame: [site",
     "2: found a syntax error"),
    ("frame: site", "\tframe: site",
     "1: found a syntax error"),
    ("    after: [look]\n", "    after: [look]\n---\nframe: map\n",
     "39: found a second document; must be one document: take out everything from the '---' on"),
    ("[80, 50], [0, 50]]", "[0, 50], [80, 50]]",
     "2: boundary: found corners that make no simple polygon (self-intersection at [40 25]); "
     "must be in order along an edge that does not cross itself"),
    ("[80, 0], [80, 50], [0, 50]]", "[80, 0]]",
     "2: boundary: found a list with 2 entries; must have at least 3 entries"),
    ("[80, 0], [80, 50], [0, 50]]", "[80, 0], [40, 0]]",
     "2: boundary: found corners that make no simple polygon (self-intersection at [40 0]); "
     "must be in order along an edge that does not cross itself"),
    ("[80, 0]", "[80, 0, 1]",
     "2: boundary[1]: found a list with 3 entries; must have at most 2 entries"),
    ("[80, 0]", "[80, north]",
     '2: boundary[1][1]: found the text "north"; must be a number'),
    ("[80, 0]", "[80, .inf]",
     "2: boundary[1][1]: found inf; must be a finite number"),
    ("[80, 0]", "[80, 1e12]",
     "2: boundary[1][1]: found 1000000000000.0; must be between -1e+09 and 1e+09"),
    ("{name: shed, polygon: [[30, 20], [36, 20]",
     "{name: shed, polygon: [[30, 20], [36, 24], [36, 20]",
     "4: keep_out[0].polygon: found corners that make no simple polygon (self-intersection at "
     "[36 20]); must be in order along an edge that does not cross itself"),
    ("{name: shed, ", "{",
     "4: keep_out[0].name: found nothing; must be given"),
    ("  - {name: shed", "  - {name: shed, polygon: [[1, 40], [2, 40], [2, 41]]}\n  - {name: shed",
     "5: keep_out[1].name: found the name shed again; must be a name of its own"),
    ("keep_out:\n  - {name", "keep_out:\n  shed: {name",
     "3: keep_out: found a mapping with 1 key; must be a list"),
    ("{with: [camera, gimbal]}", "{with: []}",
     "7: capabilities.scan[0].with: found an empty list; must have at least 1 entry"),
    ("{with: [camera, gimbal]}", "{features: [camera]}",
     "7: capabilities.scan[0].features: found an unknown key; must be one of grade, with",
     "7: capabilities.scan[0].with: found nothing; must be given"),
    ("{with: [camera, gimbal]}", "{with: [camera, camera]}",
     '7: capabilities.scan[0].with[1]: found the text "camera"; must be there once (entry [0] '
     "is the same)"),
    ("{with: [camera, gimbal]}", "{with: camera}",
     '7: capabilities.scan[0].with: found the text "camera"; must be a list'),
    ("{with: [camera, gimbal]}", "[camera, gimbal]",
     "7: capabilities.scan[0]: found a list with 2 entries; must be a mapping (key: value)"),
    ("grade: 0.6", "grade: 0",
     "8: capabilities.scan[1].grade: found 0; must be greater than 0"),
    ("grade: 0.6", "grade: 1.5",
     "8: capabilities.scan[1].grade: found 1.5; must be at most 1"),
    ("  rough: [{with: [tracks]}]", "  rough: {with: [tracks]}",
     "9: capabilities.rough: found a mapping with 1 key; must be a list of ways, such as "
     "[{with: [camera]}]"),
    ("  rough: [{with: [tracks]}]", "  rough: []",
     "9: capabilities.rough: found an empty list; must be a list of ways, such as [{with: "
     "[camera]}]"),
    ("  drone_1:", "  rover_1:",
     "22: robots.rover_1: found the key again; must be there once (the first is in line 11)"),
    ("  drone_1:", "  1st_drone:",
     '22: robots.1st_drone: found the name "1st_drone"; must be letters, digits and '
     "underscores, not starting with a digit"),
    ("  drone_1:", "  drone-1:",
     '22: robots.drone-1: found the name "drone-1"; must be letters, digits and underscores, '
     "not starting with a digit"),
    ("{model: aerial, max_speed: 3, height: [4, 8]}", "{model: legged, max_speed: 3}",
     '23: robots.drone_1.drive.model: found the text "legged"; must be one of aerial, '
     "carlike, differential, holonomic"),
    ("{model: aerial, max_speed: 3, height: [4, 8]}", "{model: carlike, max_turn_rate: 3}",
     "23: robots.drone_1.drive.max_turn_rate: found an unknown key; must be one of "
     "cruise_speed, lookahead, max_acceleration, max_speed, min_turn_radius, model, reverse",
     "23: robots.drone_1.drive.max_speed: found nothing; must be given"),
    ("{model: aerial, max_speed: 3, height: [4, 8]}",
     "{model: carlike, max_speed: 3, min_turn_radius: 0, reverse: 1}",
     "23: robots.drone_1.drive.min_turn_radius: found 0; must be greater than 0",
     "23: robots.drone_1.drive.reverse: found 1; must be true or false"),
    ("{model: aerial, max_speed: 3, height: [4, 8]}", "{max_speed: 3, height: [4, 8]}",
     "23: robots.drone_1.drive.model: found nothing; must be one of aerial, carlike, "
     "differential, holonomic"),
    ("{model: aerial, max_speed: 3, height: [4, 8]}", "aerial",
     '23: robots.drone_1.drive: found the text "aerial"; must be a mapping with at least model'),
    ("height: [4, 8]", "height: [8, 4]",
     "23: robots.drone_1.drive.height: found a band from 8 to 4; must be [lowest, highest], "
     "the lowest first"),
    ("height: [4, 8]", "lookahead: 0.2",
     "23: robots.drone_1.drive.lookahead: found an unknown key; must be one of cruise_speed, "
     "height, max_acceleration, max_climb, max_speed, max_turn_rate, model"),
    ("    drive: {model: aerial, max_speed: 3, height: [4, 8]}\n", "",
     "22: robots.drone_1.drive: found nothing; must be given, such as {model: differential, "
     "max_speed: 1.0}"),
    ("model: differential, max_speed: 1.2", "model: differential",
     "12: robots.rover_1.drive.max_speed: found nothing; must be given"),
    ("max_speed: 1.2", "max_speed: 0",
     "12: robots.rover_1.drive.max_speed: found 0; must be greater than 0"),
    ("max_speed: 1.2", 'max_speed: "1.2"',
     '12: robots.rover_1.drive.max_speed: found the text "1.2"; must be a number, without '
     "quotes"),
    ("max_speed: 1.2", "max_speed: 1,2",
     "12: robots.rover_1.drive: found the key 2; must be text: put it in quotes (the decimal "
     "sign of a number is a point, no comma)"),
    ("max_speed: 1.2", "max_speed: true",
     "12: robots.rover_1.drive.max_speed: found true; must be a number"),
    ("max_speed: 1.2", "max_speed: .nan",
     "12: robots.rover_1.drive.max_speed: found nan; must be a finite number"),
    ("radius: 0.45", "radius: -0.4",
     "13: robots.rover_1.radius: found -0.4; must be greater than 0"),
    ("radius: 0.45", "raduis: 0.45",
     "13: robots.rover_1.raduis: found an unknown key; must be one of battery, battery_topic, "
     "command, dock, drive, features, health, pose, radius, start (did you mean radius?)"),
    ("radius: 0.45", "radius:",
     "13: robots.rover_1.radius: found nothing; must be a number"),
    ("radius: 0.45", "name: rover_9",
     "13: robots.rover_1.name: found an unknown key; must be one of battery, battery_topic, "
     "command, dock, drive, features, health, pose, radius, start"),
    ("[camera, gimbal]\n    battery", "[camera, camera]\n    battery",
     '14: robots.rover_1.features[1]: found the text "camera"; must be there once (entry [0] '
     "is the same)"),
    ("[camera, gimbal]\n    battery", "[camera, 360]\n    battery",
     "14: robots.rover_1.features[1]: found 360; must be text: put it in quotes"),
    ("reserve: 0.2", "reserve: 1",
     "15: robots.rover_1.battery.reserve: found 1; must be less than 1"),
    ("capacity_wh: 480", "capacity: 480",
     "15: robots.rover_1.battery.capacity: found an unknown key; must be one of capacity_wh, "
     "charge_w, drive_w, idle_w, reserve (did you mean capacity_wh?)"),
    ("battery: {capacity_wh: 480, reserve: 0.2}", "battery: 480",
     "15: robots.rover_1.battery: found 480; must be a mapping (key: value)"),
    ("dock: [2, 2]", "dock: [2, 60]",
     "16: robots.rover_1.dock: found [2, 60] outside the boundary; must be inside the boundary "
     "and outside keep-out areas"),
    ("dock: [2, 2]", "dock: [33, 22]",
     "16: robots.rover_1.dock: found [33, 22] in the keep-out area shed; must be inside the "
     "boundary and outside keep-out areas"),
    ("start: [4, 3, 0]", "start: [4, 3]",
     "17: robots.rover_1.start: found a list with 2 entries; must have 3 entries"),
    ("start: [4, 3, 0]", "start: [0.2, 3, 0]",
     "17: robots.rover_1.start: found [0.2, 3] partly outside the boundary; must be inside the "
     "boundary and outside keep-out areas"),
    ("start: [4, 3, 0]", "start: [36.2, 22, 0]",
     "17: robots.rover_1.start: found [36.2, 22] partly in the keep-out area shed; must be "
     "inside the boundary and outside keep-out areas"),
    ("start: [8, 3, 0]", "start: [4.5, 3, 0]",
     "24: robots.drone_1.start: found a place where its body overlaps with rover_1; must be at "
     "least 0.85 m from rover_1's start"),
    ("pose: {topic: rover_1/odom}", "pose: {topic: rover_1/odom, tf: rover_1/base_link}",
     "18: robots.rover_1.pose: found topic and tf; must have one of the two"),
    ("pose: {topic: rover_1/odom}", "pose: {type: nav_msgs/msg/Odometry}",
     "18: robots.rover_1.pose: found neither topic nor tf; must have one of the two, such as "
     "topic: rover_1/odom"),
    ("pose: {topic: rover_1/odom}", "pose: {tf: rover_1/base_link, frame: odom}",
     '18: robots.rover_1.pose.frame: found the text "odom"; must be left out beside tf'),
    ("pose: {topic: rover_1/odom}", "pose: {tf: /rover_1/base_link}",
     '18: robots.rover_1.pose.tf: found the text "/rover_1/base_link"; must not start with a '
     "slash (tf2 refuses that)"),
    ("pose: {topic: rover_1/odom}", "pose: {topic: rover_1/odom, offset: [1, 2, 0]}",
     "18: robots.rover_1.pose.offset: found an offset without frame; must come with frame, the "
     "frame of the robot's own that lies there"),
    ("pose: {topic: rover_1/odom}", "pose: {topic: rover_1/odom, type: Odometry}",
     '18: robots.rover_1.pose.type: found the text "Odometry"; must be one of '
     "geometry_msgs/msg/PoseStamped, geometry_msgs/msg/PoseWithCovarianceStamped, "
     "nav_msgs/msg/Odometry"),
    ("pose: {topic: rover_1/odom}", "pose: {topic: drone_1/odom}",
     '18: robots.rover_1.pose.topic: found the text "drone_1/odom"; must be a topic of its own '
     "(drone_1.pose.topic has this one)"),
    ("command: {topic: rover_1/cmd_vel}", "command: {topic: /drone_1/cmd_vel}",
     '19: robots.rover_1.command.topic: found the text "/drone_1/cmd_vel"; must be a topic of '
     "its own (drone_1.command.topic has this one)"),
    ("command: {topic: rover_1/cmd_vel}", "command: {topic: rover_1//cmd_vel}",
     '19: robots.rover_1.command.topic: found the text "rover_1//cmd_vel"; must be a topic '
     "name: letters, digits and underscores in parts divided by single slashes, no part "
     "starting with a digit"),
    ("command: {topic: rover_1/cmd_vel}", "command: {topic: ~/cmd_vel}",
     '19: robots.rover_1.command.topic: found the text "~/cmd_vel"; must be a topic name: '
     "letters, digits and underscores in parts divided by single slashes, no part starting "
     "with a digit"),
    ("command: {topic: rover_1/cmd_vel}", "command: {type: geometry_msgs/msg/Twst}",
     '19: robots.rover_1.command.type: found the text "geometry_msgs/msg/Twst"; must be one of '
     "geometry_msgs/msg/PoseStamped, geometry_msgs/msg/Twist, geometry_msgs/msg/TwistStamped "
     "(did you mean geometry_msgs/msg/Twist?)"),
    ("battery_topic: rover_1/battery", "battery_topic: rover_1/odom",
     '20: robots.rover_1.battery_topic: found the text "rover_1/odom"; must be a topic of its '
     "own (rover_1.pose.topic has this one)"),
    ("battery_topic: rover_1/battery", "battery_topic: rover 1/battery",
     '20: robots.rover_1.battery_topic: found the text "rover 1/battery"; must be a topic '
     "name: letters, digits and underscores in parts divided by single slashes, no part "
     "starting with a digit"),
    ("feature: camera}", "feature: camra}",
     '21: robots.rover_1.health[0].feature: found the text "camra"; must be one of camera, '
     "gimbal (did you mean camera?)"),
    ("kind: patrol", "kind: guard",
     f'27: tasks.rows.kind: found the text "guard"; must be one of {KINDS}'),
    ("    kind: patrol\n", "",
     f"26: tasks.rows.kind: found nothing; must be one of {KINDS}"),
    ("[[10, 40], [70, 40]]", "[[10, 40]]",
     "28: tasks.rows.waypoints: found a list with 1 entry; must have at least 2 entries"),
    ("[[10, 40], [70, 40]]", "[[10, 40], [10, 40]]",
     "28: tasks.rows.waypoints: found the same point again; must lead somewhere"),
    ("[[10, 40], [70, 40]]", "[[10, 40], [33, 22]]",
     "28: tasks.rows.waypoints[1]: found [33, 22] in the keep-out area shed; must be inside "
     "the boundary and outside keep-out areas"),
    ("[[10, 40], [70, 40]]", "[[10, 40], [70, 40]]\n    laps: 1.5",
     "29: tasks.rows.laps: found 1.5; must be a whole number"),
    ("needs: {scan: 1.0}", "needs: {scam: 1.0}",
     "29: tasks.rows.needs.scam: found an undeclared capability; must be one of rough, scan "
     "(did you mean scan?)"),
    ("needs: {scan: 1.0}", "needs: {scan: 0}",
     "29: tasks.rows.needs.scan: found 0; must be greater than 0"),
    ("needs: {scan: 1.0}", "needs: [scan]",
     "29: tasks.rows.needs: found a list with 1 entry; must be a mapping (key: value)"),
    ("needs: {scan: 1.0}", "needs: {scan: 1.0}\n    each: [rouhg]",
     '30: tasks.rows.each[0]: found the text "rouhg"; must be one of rough, scan (did you mean '
     "rough?)"),
    ("robots: {min: 1, max: 2}", "robots: {min: 3, max: 2}",
     "30: tasks.rows.robots: found min 3 above max 2; must have min at most max"),
    ("robots: {min: 1, max: 2}", "robots: 2",
     "30: tasks.rows.robots: found 2; must be a mapping (key: value)"),
    ("robots: {min: 1, max: 2}", "robots: {min: 1, max: 0}",
     "30: tasks.rows.robots.max: found 0; must be at least 1"),
    ("robots: {min: 1, max: 2}", "priority: 5",
     "30: tasks.rows.priority: found 5; must be at most 4"),
    ("robots: {min: 1, max: 2}", "active: no",
     '30: tasks.rows.active: found the text "no"; must be true or false'),
    ("robots: {min: 1, max: 2}", "active: 1",
     "30: tasks.rows.active: found 1; must be true or false"),
    ("robots: {min: 1, max: 2}", "face: [1, 2]",
     "30: tasks.rows.face: found an unknown key; must be one of active, after, each, kind, "
     "laps, needs, priority, robots, urgency, waypoints"),
    ("at: [20, 10]", "at: [20]",
     "33: tasks.look.at: found a list with 1 entry; must be [x, y] or [x, y, z]"),
    ("at: [20, 10]", "at: [20, 10, 5, 1]",
     "33: tasks.look.at: found a list with 4 entries; must be [x, y] or [x, y, z]"),
    ("at: [20, 10]", "at: [20, ten]",
     '33: tasks.look.at[1]: found the text "ten"; must be a number'),
    ("at: [20, 10]", "at: [20, 10, high]",
     '33: tasks.look.at[2]: found the text "high"; must be a number'),
    ("at: [20, 10]", "at: gate",
     '33: tasks.look.at: found the text "gate"; must be [x, y] or [x, y, z]'),
    ("at: [20, 10]", "at: [20, 60]",
     "33: tasks.look.at: found [20, 60] outside the boundary; must be inside the boundary and "
     "outside keep-out areas"),
    ("    at: [20, 10]\n", "",
     "31: tasks.look.at: found nothing; must be given"),
    ("after: [look]", "after: [lok]",
     '38: tasks.guard.after[0]: found the text "lok"; must be one of look, rows (did you mean '
     "look?)"),
    ("after: [look]", "after: [rows]",
     "38: tasks.guard.after[0]: found rows, which never ends; must be a task that ends: a "
     "visit, a sweep, or a patrol with laps"),
    ("after: [look]", "after: [look, look]",
     '38: tasks.guard.after[1]: found the text "look"; must be there once (entry [0] is the '
     "same)"),
    ("dwell: 5", "after: [look]",
     "34: tasks.look.after: found a circle: look after look; must let one of them come first"),
    ("  guard:\n    kind: watch", "  gu.ard:\n    kind: watch",
     '35: tasks."gu.ard": found the name "gu.ard"; must be letters, digits and underscores, '
     "not starting with a digit"),
    ("tasks:\n", "tasks: [1]\nx:\n",
     "25: tasks: found a list with 1 entry; must be a mapping (name: ...)",
     "26: x: found an unknown key; must be one of boundary, capabilities, frame, keep_out, "
     "robots, tasks"),
]


BAD_WORLDS = [
    ("ground:\n", "faults: {feature_mtbf_h: 0}\nground:\n",
     "2: faults.feature_mtbf_h: found 0; must be greater than 0"),
    ("ground:\n", "faults: {feature_mtbf: 2}\nground:\n",
     "2: faults.feature_mtbf: found an unknown key; must be one of feature_mtbf_h, feature_mttr_h, "
     "features, robot_mtbf_h, robot_mttr_h, stall_mtbf_h, stall_mttr_h (did you mean "
     "feature_mtbf_h?)"),
    ("ground:\n", "faults: {robot_mttr_h: 2}\nground:\n",
     "2: faults.robot_mttr_h: found a time to repair what never fails; must come with "
     "robot_mtbf_h"),
    ("ground:\n", "faults: {feature_mtbf_h: 2, features: [camra]}\nground:\n",
     '2: faults.features[0]: found the text "camra"; must be one of camera, gimbal (did you mean '
     "camera?)"),
    ("ground:\n", "faults: {robot_mtbf_h: 2, features: [camera]}\nground:\n",
     "2: faults.features: found features that never fail; must come with feature_mtbf_h"),
    ("ground:\n", "faults: [2]\nground:\n",
     "2: faults: found a list with 1 entry; must be a mapping (key: value)"),
    ("position_m: 0.02", "position_m: -1",
     "1: noise.position_m: found -1; must be at least 0"),
    ("position_m: 0.02", "position: 0.02",
     "1: noise.position: found an unknown key; must be one of heading_rad, position_m (did you "
     "mean position_m?)"),
    ("ground:\n", "grounds:\n",
     "2: grounds: found an unknown key; must be one of events, faults, ground, noise, targets "
     "(did you mean ground?)"),
    ("circle: [55, 41, 6]", "circle: [55, 41]",
     "3: ground[0].circle: found a list with 2 entries; must have 3 entries"),
    ("circle: [55, 41, 6]", "circle: [55, 41, 0]",
     "3: ground[0].circle[2]: found 0; must be greater than 0"),
    ("keeps: 0.05", "keeps: 1.2",
     "3: ground[0].keeps: found 1.2; must be at most 1"),
    ("affects: [camera]", "affects: [wheels]",
     '3: ground[0].affects[0]: found the text "wheels"; must be one of camera, gimbal'),
    ("affects: [camera]", "affects: []",
     "3: ground[0].affects: found an empty list; must have at least 1 entry"),
    ("  - {name: mud",
     "  - {name: mud, circle: [1, 1, 1], keeps: 0, affects: [camera]}\n  - {name: mud",
     "4: ground[1].name: found the name mud again; must be a name of its own"),
    ("robot: rover_1, feature", "robot: rover_2, feature",
     '5: events[0].robot: found the text "rover_2"; must be one of drone_1, rover_1 (did you '
     "mean rover_1?)"),
    ("feature: camera,", "feature: rotors,",
     '5: events[0].feature: found the text "rotors"; must be one of camera, gimbal'),
    ("level: error", "level: broken",
     '5: events[0].level: found the text "broken"; must be one of error, ok, warn'),
    ("{at: 40, ", "{",
     "5: events[0].at: found nothing; must be given"),
    ("at: 40", "at: -40",
     "5: events[0].at: found -40; must be at least 0"),
    ("pose: silent", "pose: quiet",
     '6: events[1].pose: found the text "quiet"; must be one of resumed, silent'),
    ("battery: 0.18", "battery: 18",
     "7: events[2].battery: found 18; must be at most 1"),
    ("stalled: true", "stalled: yes",
     '8: events[3].stalled: found the text "yes"; must be true or false'),
    ("stalled: true", "stalled: true, battery: 0.5",
     "8: events[3]: found battery and stalled; must have exactly one of feature, pose, "
     "battery, stalled"),
    ("stalled: true", "stuck: true",
     "8: events[3]: found nothing that happens; must have exactly one of feature, pose, "
     "battery, stalled"),
    ("stalled: true", "stalled: true, level: error",
     "8: events[3].level: found an unknown key; must be one of at, robot, stalled"),
    ("robot: drone_1, stalled", "stalled",
     "8: events[3]: found neither robot nor task; must have one of the two"),
    ("robot: drone_1, stalled", "robot: drone_1, task: rows, stalled",
     "8: events[3]: found both robot and task; must have one of the two"),
    ("task: rows", "task: row",
     '9: events[4].task: found the text "row"; must be one of guard, look, rows (did you mean '
     "rows?)"),
    ("active: false", "active: null",
     "9: events[4].active: found nothing; must be given"),
    ("active: false", "done: false",
     "9: events[4]: found nothing that happens; must have exactly one of active, move"),
    ("move: [60, 10]", "move: [60, 70]",
     "10: events[5].move: found [60, 70] outside the boundary; must be inside the boundary and "
     "outside keep-out areas"),
    ("move: [60, 10]", "move: [60, 10, 4]",
     "10: events[5].move: found a list with 3 entries; must have at most 2 entries"),
    ("{at: 99, task: guard, move: [60, 10]}", "later",
     '10: events[5]: found the text "later"; must be a mapping such as {at: 40, robot: ...}'),
    ("noise: {position_m: 0.02, heading_rad: 0.01}", "[noise]\n---",
     "1: found a list with 1 entry; must be a mapping (key: value)",
     "2: found a second document; must be one document: take out everything from the '---' on"),
]


BAD_EDITS = [
    ("rows: {laps: -1}",
     "1: rows.laps: found -1; must be at least 0"),
    ("rows: {priority: 9}\nlook: {dwell: x}",
     "1: rows.priority: found 9; must be at most 4",
     '2: look.dwell: found the text "x"; must be a number'),
    ("row: null",
     "1: row: found a task to take out that is not there; must be one of guard, look, rows "
     "(did you mean rows?)"),
    ("look: null",
     '1: guard.after[0]: found the text "look"; must be rows, the only one there is'),
    ("new: {at: [1, 2]}",
     f"1: new.kind: found nothing; must be one of {KINDS}"),
    ("new: {kind: covr, at: [1, 2]}",
     f'1: new.kind: found the text "covr"; must be one of {KINDS} (did you mean cover?)'),
    ("new: {kind: cover, at: [1, 2]}",
     "1: new.at: found an unknown key; must be one of active, after, area, density, each, kind, "
     "needs, priority, robots, urgency",
     "1: new.area: found nothing; must be given"),
    ("new: {kind: cover, area: [[1, 1], [9, 9], [9, 1], [1, 9]]}",
     "1: new.area: found corners that make no simple polygon (self-intersection at [5 5]); must "
     "be in order along an edge that does not cross itself"),
    ("new: {kind: cover, area: [[1, 1], [90, 1], [9, 9]], density: [{at: [1, 1], spread: 0}]}",
     "1: new.density[0].spread: found 0; must be greater than 0",
     "1: new.area: found an area partly outside the boundary; must be inside the boundary and "
     "outside keep-out areas"),
    ("new: {kind: sweep, area: [[29, 19], [40, 19], [40, 30]], lane_width: 1, overlap: 1}",
     "1: new.overlap: found 1; must be at most 0.9",
     "1: new.area: found an area partly in the keep-out area shed; must be inside the boundary "
     "and outside keep-out areas"),
    ("new: {kind: encircle, around: 3, radius: 0, face: sideways}",
     "1: new.around: found 3; must be [x, y] or a mapping",
     "1: new.radius: found 0; must be greater than 0",
     '1: new.face: found the text "sideways"; must be one of inward, outward'),
    ("new: {kind: encircle, around: {task: look, robot: rover_1}, radius: 3, face: [1, 2, 3]}",
     "1: new.around: found values that do not fit together; must be changed: give exactly one "
     "of task, robot and topic",
     "1: new.face: found a list with 3 entries; must be outward, inward or [x, y]"),
    ("new: {kind: encircle, around: {task: loook}, radius: 3}",
     '1: new.around.task: found the text "loook"; must be one of guard, look, rows (did you '
     "mean look?)"),
    ("new: {kind: follow, target: {robot: rover_9}, offset: [-2, 0]}",
     '1: new.target.robot: found the text "rover_9"; must be one of drone_1, rover_1 (did you '
     "mean rover_1?)"),
    ("new: {kind: follow, target: {topic: a b}, offset: [-2]}",
     "1: new.offset: found a list with 1 entry; must have 2 entries",
     '1: new.target.topic: found the text "a b"; must be a topic name: letters, digits and '
     "underscores in parts divided by single slashes, no part starting with a digit"),
    ("new: {kind: follow, target: {task: new}, offset: [-2, 0]}",
     "1: new.target.task: found a circle: new around new; must keep to something that does not "
     "keep to it"),
    ("new: {kind: follow, target: {task: old}, offset: [-2, 0]}\n"
     "old: {kind: encircle, around: {task: new}, radius: 3}",
     "1: new.target.task: found a circle: new around old around new; must keep to something "
     "that does not keep to it"),
    ("new: {kind: formation, at: [9, 9], offsets: [[0, 0]], robots: {min: 2}}",
     "1: new: found values that do not fit together; must be changed: there may be as many "
     "robots as offsets, which are 1"),
    ("new: {kind: visit, at: [99, 2]}",
     "1: new.at: found [99, 2] outside the boundary; must be inside the boundary and outside "
     "keep-out areas"),
    ("rows: {needs: {flight: 1}}",
     "1: rows.needs.flight: found an undeclared capability; must be one of rough, scan"),
    ("rows: {kind: visit}",
     "1: rows.at: found nothing; must be given"),
    ("look: {after: [guard]}",
     "1: look.after[0]: found guard, which never ends; must be a task that ends: a visit, a "
     "sweep, or a patrol with laps",
     "1: look.after: found a circle: look after guard after look; must let one of them come "
     "first"),
    ("rows: 3",
     "1: rows: found 3; must be a mapping with at least kind"),
    ("rows",
     '1: found the text "rows"; must be a mapping (name: ...)'),
    ("rows: {robots: {min: 4, max: 1}}",
     "1: rows.robots: found min 4 above max 1; must have min at most max"),
    ("look: {name: gaze}",
     "1: look.name: found an unknown key; must be one of active, after, at, dwell, each, "
     "heading, kind, needs, priority, robots, tolerance, urgency"),
    ("look: {at: [1, 2]}\nlook: {at: [2, 2]}",
     "2: look: found the key again; must be there once (the first is in line 1)"),
    ("new-task: {kind: watch, at: [1, 2]}",
     '1: new-task: found the name "new-task"; must be letters, digits and underscores, not '
     "starting with a digit"),
    ("look: {kind: patrol, waypoints: [[1, 1], [9, 9]]}",
     "1: guard.after[0]: found look, which never ends; must be a task that ends: a visit, a "
     "sweep, or a patrol with laps"),
]


def messages(error: FileError, name: str) -> list[str]:
    """Give the lines of an error without the name of the file; syntax errors cut short.

    What exactly the parser dislikes differs between its C and Python variants.
    """
    lines = str(error).splitlines()
    assert len(lines) == len(error.problems), "one line for each problem"
    assert all(line.startswith(f"{name}:") for line in lines)
    bare = [line.removeprefix(f"{name}:") for line in lines]
    return [re.sub(r"(found a syntax error) \(.*", r"\1", line) for line in bare]


def changed(text: str, old: str, new: str) -> str:
    assert text.count(old) == 1, f"{old!r} must be there once"
    return text.replace(old, new)


@pytest.mark.parametrize(("old", "new", "expected"), [(o, n, e) for o, n, *e in BAD_TEAMS])
def test_bad_team(old, new, expected):
    with pytest.raises(FileError) as caught:
        parse_team(changed(TEAM, old, new), "farm.yaml")
    assert messages(caught.value, "farm.yaml") == expected


@pytest.mark.parametrize(("old", "new", "expected"), [(o, n, e) for o, n, *e in BAD_WORLDS])
def test_bad_world(old, new, expected):
    with pytest.raises(FileError) as caught:
        parse_world(changed(WORLD, old, new), parse_team(TEAM), "hail.yaml")
    assert messages(caught.value, "hail.yaml") == expected


@pytest.mark.parametrize(("text", "expected"), [(t, e) for t, *e in BAD_EDITS])
def test_bad_task_edit(text, expected):
    team = parse_team(TEAM)
    with pytest.raises(FileError) as caught:
        merge_tasks(team, text)
    assert messages(caught.value, "task_edit") == expected


def test_the_unchanged_files_are_right():
    """Else the tables above would show the problems of the base, not of the change."""
    assert isinstance(parse_world(WORLD, parse_team(TEAM)), World)


def test_all_problems_come_in_one_pass():
    changes = [row[:2] for row in BAD_TEAMS if row[0] in (
        "[80, 0]", "grade: 0.6", "max_speed: 1.2", "radius: 0.45", "reserve: 0.2",
        "dock: [2, 2]", "feature: camera}", "height: [4, 8]", "kind: patrol", "at: [20, 10]",
        "after: [look]",
    )]
    text, used = TEAM, set()
    for old, new in changes:
        if old not in used:
            text = changed(text, old, new)
            used.add(old)
    with pytest.raises(FileError) as caught:
        parse_team(text, "farm.yaml")
    places = [problem.path for problem in caught.value.problems]
    assert places == [
        "boundary[1]",
        "capabilities.scan[1].grade",
        "robots.rover_1.drive.max_speed",
        "robots.rover_1.radius",
        "robots.rover_1.battery.reserve",
        "robots.rover_1.health[0].feature",
        "robots.drone_1.drive.height",
        "tasks.rows.kind",
        "tasks.look.at",
        "tasks.guard.after[0]",
    ]
    lines = [problem.line for problem in caught.value.problems]
    assert lines == sorted(lines)


@pytest.mark.parametrize("text", ["", "# nothing yet\n", "null", "robots:", "robots: {}"])
def test_no_robots(text):
    with pytest.raises(FileError, match="must be a mapping|must have at least one robot"):
        parse_team(text)


def test_longer_circle_is_named_once():
    kinds = "kind: visit, at: [1, 1]"
    tasks = f"a: {{{kinds}, after: [c]}}\nb: {{{kinds}, after: [a]}}\nc: {{{kinds}, after: [b]}}"
    with pytest.raises(FileError) as caught:
        merge_tasks(parse_team(TEAM), tasks)
    assert [problem.found for problem in caught.value.problems] == [
        "a circle: a after c after b after a"
    ]


def test_files_that_cannot_be_read(tmp_path):
    latin = tmp_path / "latin.yaml"
    latin.write_bytes(b"frame: site\n# caf\xe9\n")
    large = tmp_path / "large.yaml"
    large.write_bytes(b"#" * (LARGEST_FILE + 1))
    for path, expected in (
        (tmp_path / "absent.yaml", "absent.yaml: found no file that can be read (No such file"),
        (tmp_path, "found no file that can be read (Is a directory)"),
        (latin, "latin.yaml:2: found bytes that are not UTF-8 text"),
        (large, f"large.yaml: found more than {LARGEST_FILE} bytes"),
    ):
        with pytest.raises(FileError, match=re.escape(expected)):
            read_team(path)
        with pytest.raises(FileError, match=re.escape(expected)):
            read_world(path, parse_team(TEAM))


@pytest.mark.parametrize(
    ("text", "found"),
    [
        ("a: " + "[" * (DEEPEST + 1) + "]" * (DEEPEST + 1), f"more than {DEEPEST} levels"),
        ("a: " + "[" * 20_000, f"more than {DEEPEST} levels|nesting depth"),
        ("a: [" + "1, " * MOST_VALUES + "]", f"more than {MOST_VALUES} values"),
        ("#" * (LARGEST_FILE + 1), f"{LARGEST_FILE + 1} characters"),
        ("a: &a [*a]", r"the alias \*a"),
        ("a: &a [[[[[[[[[]]]]]]]]]\nb: [[[[[[[[[*a]]]]]]]]]", f"more than {DEEPEST} levels"),
    ],
)
def test_monstrous_files(text, found):
    with pytest.raises(FileError, match=found):
        parse_team(text)


def test_aliases_of_aliases_are_counted():
    """Ten levels of ten aliases each would stand for 10**10 values."""
    lines = ["a0: &a0 [1, 1, 1, 1, 1, 1, 1, 1, 1, 1]"]
    lines += [f"a{n}: &a{n} [{', '.join([f'*a{n - 1}'] * 10)}]" for n in range(1, 10)]
    with pytest.raises(FileError, match=f"more than {MOST_VALUES} values"):
        parse_team("\n".join(lines))


def test_a_problem_inside_an_alias_shows_the_alias():
    text = changed(TEAM, "{with: [camera], grade: 0.6}", "&way {with: [camera], grade: 6}")
    text = changed(text, "[{with: [tracks]}]", "[*way]")
    with pytest.raises(FileError) as caught:
        parse_team(text)
    places = [(problem.line, problem.path) for problem in caught.value.problems]
    assert places == [(8, "capabilities.scan[1].grade"), (9, "capabilities.rough[0].grade")]


class Entry:
    """An entry point of an invented package."""

    def __init__(self, name: str, loaded: object) -> None:
        self.name, self.loaded = name, loaded
        self.group, self.value, self.dist = "allocator_node.tasks", "hail:Mapping", None

    def load(self) -> object:
        if isinstance(self.loaded, Exception):
            raise self.loaded
        return self.loaded




@pytest.mark.parametrize(
    ("entry", "reason"),
    [
        (Entry("map", ImportError("no module named hail")), "cannot be imported: ImportError: no"),
        (Entry("map", RuntimeError("bad day")), "cannot be imported: RuntimeError: bad day"),
        (Entry("map", dict), "is not derived from allocator_node.tasks.base.Task"),
        (Entry("map", Visit(name="a", at=(0, 0))), "is not derived from"),
        (Entry("visit", Visit), "takes a name that is taken"),
    ],
)
def test_a_broken_task_kind_of_another_package(monkeypatch, entry, reason):
    monkeypatch.setattr(plugins, "_entries", lambda group: (entry,) if "tasks" in group else ())
    with pytest.raises(FileError) as caught:
        parse_team(TEAM, "farm.yaml")
    assert "farm.yaml:25: tasks: found an installed package that cannot be used" in str(
        caught.value
    )
    assert f"allocator_node.tasks: {entry.name} = hail:Mapping {reason}" in str(caught.value)


PIECES = [*TEAM.split(), *WORLD.split(), "- ", "\n", "\n  ", ": ", "&a ", "*a", "!!map ", "<<: ",
          "1e999", "-1e-320", ".nan", "null", "~", '"', "'", "{", "}", "[", "]", "\t", "\0",
          "\ud800", "\u2028", "%YAML 3.0\n---\n", "...", "|", ">-", "? ", "9" * 5000,
          "0x" + "f" * 30]


@st.composite
def mutated(draw: st.DrawFn, text: str) -> str:
    """Give a text with a few spans replaced by pieces or left out."""
    for _ in range(draw(st.integers(1, 4))):
        start = draw(st.integers(0, len(text)))
        end = min(len(text), start + draw(st.integers(0, 12)))
        piece = draw(st.sampled_from(PIECES) | st.text(max_size=3) | st.just(""))
        text = text[:start] + piece + text[end:]
    return text


@settings(max_examples=150, deadline=None)
@given(mutated(TEAM))
def test_any_team_text_gives_a_team_or_a_file_error(text):
    try:
        assert isinstance(parse_team(text), Team)
    except FileError as error:
        assert error.problems
        assert len(str(error).splitlines()) == len(error.problems)


@settings(max_examples=50, deadline=None)
@given(mutated(WORLD), mutated(TEAM.partition("tasks:\n")[2]))
def test_any_world_or_edit_gives_its_result_or_a_file_error(world, edit):
    team = parse_team(TEAM)
    for read, kind in (
        (lambda: parse_world(world, team), World), (lambda: merge_tasks(team, edit), Team)
    ):
        try:
            assert isinstance(read(), kind)
        except FileError as error:
            assert error.problems
