# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
from glob import glob

from setuptools import find_packages, setup

PACKAGE = 'teleop_eval'

# ROS 2 from wheels, for machines without a ROS installation. In a ROS installation rclpy and
# the messages are the distribution's and none of these is installed.
ROS_WHEELS = [
    'ros-rclpy==9.1.2',
    'ros-rmw-fastrtps-cpp==9.3.3',
    'ros-std-msgs==5.5.1',
    'ros-std-srvs==5.5.1',
    'ros-geometry-msgs==5.5.1',
    'ros-sensor-msgs==5.5.1',
    'ros-nav-msgs==5.5.1',
    'ros-trajectory-msgs==5.5.1',
    'ros-diagnostic-msgs==5.5.1',
]

# pytest stays below 8.4 because launch_pytest, where there is one, needs that.
TEST_TOOLS = [
    'pytest>=7,<8.4',
    'pytest-timeout',
    'pytest-xdist',
    'hypothesis',
    'ruff',
    'mypy',
    'pandas',
    'mcap-ros2-support',
    'pin>=3',
    'transforms3d',
    'example-robot-data==6.0.0',
]

setup(
    name=PACKAGE,
    version='0.1.0',
    packages=find_packages(include=[PACKAGE, f'{PACKAGE}.*']),
    package_data={PACKAGE: ['py.typed']},
    data_files=[
        ('share/ament_index/resource_index/packages', [f'resource/{PACKAGE}']),
        (f'share/{PACKAGE}', ['package.xml']),
        (f'share/{PACKAGE}/launch', sorted(glob('launch/*.launch.xml'))),
        (f'share/{PACKAGE}/config', sorted(glob('config/*'))),
        # `ros2 run` looks here; the console script below would put each on PATH.
        (f'lib/{PACKAGE}', sorted(glob('resource/run/*'))),
    ],
    python_requires='>=3.10',
    install_requires=[
        'numpy>=1.26',
        'scipy>=1.11',
        'PyYAML',
        'rich',
        'defusedxml',
        'rosbags',
        'mcap',
        'zstandard',
        'lz4',
    ],
    extras_require={'ros': ROS_WHEELS, 'test': TEST_TOOLS},
    entry_points={'console_scripts': [f'{PACKAGE} = teleop_eval.cli.main:main']},
    zip_safe=True,
    maintainer='teleop_eval maintainers',
    maintainer_email='maintainers@teleop-eval.example',
    description='Evaluate the motion mapping of a teleoperated robot arm, live and afterwards.',
    license='Apache-2.0',
)
