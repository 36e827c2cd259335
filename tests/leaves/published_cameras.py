# Copyright 2026 servo_nodes maintainers
# SPDX-License-Identifier: Apache-2.0
"""Calibrations that others published: TUM RGB-D, KITTI, EuRoC, TUM-VI, a factory's."""

from __future__ import annotations

from servo_nodes.camera import Camera

FR1 = Camera(640, 480, 517.3, 516.5, 318.6, 255.3, 'plumb_bob',
             (0.2624, -0.9531, -0.0054, 0.0026, 1.1633))
FR2 = Camera(640, 480, 520.9, 521.0, 325.1, 249.7, 'plumb_bob',
             (0.2312, -0.7849, -0.0033, -0.0001, 0.9172))
KITTI = Camera(1392, 512, 984.2439, 980.8141, 690.0, 233.1966, 'plumb_bob',
               (-0.3728755, 0.2037299, 0.002219027, 0.001383707, -0.07233722))
EUROC = Camera(752, 480, 458.654, 457.296, 367.215, 248.375, 'plumb_bob',
               (-0.28340811, 0.07395907, 0.00019359, 1.76187114e-05))
TUM_VI = Camera(512, 512, 190.97847715128717, 190.9733070521226, 254.93170605935475,
                256.8974428996504, 'equidistant',
                (0.0034823894022493434, 0.0007150348452162257, -0.0020532361418706202,
                 0.00020293673591811182))
FACTORY = Camera(250, 250, 196.50531005859375, 196.50531005859375, 126.86713409423828,
                 125.84786987304688, 'rational_polynomial',
                 (-4.860828876495361, 17.2819766998291, 0.00020376102474983782,
                  0.0010251018684357405, -25.172250747680664, -4.943647384643555,
                  17.51442527770996, -25.290760040283203))
PINHOLE = Camera(640, 480, 500.0, 510.0, 319.5, 239.5)
CAMERAS = {'fr1': FR1, 'fr2': FR2, 'kitti': KITTI, 'euroc': EUROC, 'tum_vi': TUM_VI,
           'factory': FACTORY, 'pinhole': PINHOLE}
