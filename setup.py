# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Build and install `servo_nodes`, with colcon (ament_python) or with pip."""

from glob import glob

from setuptools import find_packages, setup
from setuptools.command.install import install

PACKAGE = 'servo_nodes'

NODES = ('tracker', 'controller', 'simulator', 'proxy')
TOOLS = {'servo_demo': 'ros.demo', 'servo_drill': 'ros.drill', 'servo_bench': 'offline.bench',
         'servo_replay': 'offline.replay'}

# ROS 2 as wheels, for machines without a ROS installation; a ROS machine needs none of them.
STANDALONE = [
    'ros-rclpy', 'ros-rmw-fastrtps-cpp', 'ros-diagnostic-msgs', 'ros-geometry-msgs',
    'ros-lifecycle-msgs', 'ros-rcl-interfaces', 'ros-rosgraph-msgs', 'ros-sensor-msgs',
    'ros-std-msgs', 'ros-std-srvs',
]


class Install(install):
    """Let setup.cfg place the executables for colcon and for distribution builds only.

    They name a prefix, or repeat the place on the command line. A pip that finds no `wheel`
    package runs this very command without either, and its users look for the executables on
    their path.
    """

    def finalize_options(self):
        source, _ = self.distribution.get_option_dict('install').get(
            'install_scripts', ('nowhere', None))
        if source.endswith('setup.cfg') and self.prefix is None and self.root is None:
            self.install_scripts = None
        super().finalize_options()


setup(
    name=PACKAGE,
    version='0.1.0',
    description="Bring a camera in a robot's hand back to a view it was shown.",
    author='servo_nodes maintainers',
    author_email='maintainers@example.org',
    maintainer='servo_nodes maintainers',
    maintainer_email='maintainers@example.org',
    license='Apache-2.0',
    python_requires='>=3.10',
    packages=find_packages(include=[PACKAGE, f'{PACKAGE}.*']),
    package_data={PACKAGE: ['py.typed']},
    data_files=[
        ('share/ament_index/resource_index/packages', [f'resource/{PACKAGE}']),
        (f'share/{PACKAGE}', ['package.xml']),
        (f'share/{PACKAGE}/launch', sorted(glob('launch/*.launch.xml'))),
        (f'share/{PACKAGE}/config', sorted(glob('config/*.*'))),
    ],
    # No window is ever opened: the headless wheel runs where the other one misses libGL.
    install_requires=[
        'numpy>=1.26', 'opencv-python-headless>=4.6', 'scipy>=1.11',
        'transforms3d>=0.4.2', 'PyYAML>=6.0',
    ],
    extras_require={
        'standalone': STANDALONE,
        'report': ['matplotlib>=3.7'],
        'bags': ['rosbags>=0.11', 'lz4>=4.3', 'backports.zstd>=1.0; python_version < "3.14"'],
        'test': [
            'pytest>=7.4', 'pytest-timeout>=2.2', 'pytest-cov>=4.1', 'hypothesis>=6.90',
            'pin>=2.7', 'pytransform3d>=3.5', 'scikit-image>=0.22',
        ],
    },
    entry_points={
        'console_scripts': [
            *(f'{node}_node = {PACKAGE}.ros.{node}_node:main' for node in NODES),
            *(f'{tool} = {PACKAGE}.{module}:main' for tool, module in TOOLS.items()),
        ],
    },
    cmdclass={'install': Install},
    zip_safe=False,
)
