#!/usr/bin/env python3
"""Where pixels of an invented camera look, by vectors: an independent path from pixel to sky.

The direction of a focal-plane point is built from the boresight, the direction of the focal plane's
+y axis on the sky and the one at right angles to it; distortion is inverted by bisection. No
gnomonic formula, no spherical trigonometry.

    python3 make.py > positions.csv
"""

import numpy as np

FOCAL_MM = 8280.0
PIXEL_MM = 0.015
SIZE = 2048
CASES = [  # name, parity, psi, centre, rotation, flip, k1, k2, ra, dec
    ("plain", 1, 0.0, (0.0, 0.0), 0.0, False, 0.0, 0.0, 150.0, 2.0),
    ("turned", 1, 33.0, (-15.6, 15.6), 90.5, False, 0.0, 0.0, 0.02, 61.0),
    ("mirrored", -1, 200.0, (15.6, 15.6), 180.0, True, 0.0, 0.0, 359.99, -45.0),
    ("distorted", 1, 12.0, (120.0, -90.0), -90.0, False, 8.0, -900.0, 10.0, -80.0),
    ("mirrored_distorted", -1, 300.0, (-60.0, 100.0), 3.0, True, -12.0, 300.0, 0.0, 89.0),
]


def vector(ra, dec):
    ra, dec = np.radians(ra), np.radians(dec)
    return np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])


def undistorted(r, k1, k2):
    low, high = 0.0, 0.03  # beyond any field here, before the polynomial turns back
    for _ in range(200):
        t = 0.5 * (low + high)
        if t * (1 + k1 * t**2 + k2 * t**4) < r:
            low = t
        else:
            high = t
    return 0.5 * (low + high)


def main():
    print("case,parity,psi_deg,centre_x_mm,centre_y_mm,rotation_deg,flip,k1,k2,ra_deg,dec_deg,"
          "x_px,y_px,star_ra_deg,star_dec_deg")
    for name, parity, psi, centre, rotation, flip, k1, k2, ra, dec in CASES:
        ahead = vector(ra, dec)
        east = vector(ra + 90.0, 0.0)
        north = np.cross(ahead, east)
        up = np.cos(np.radians(psi)) * north + np.sin(np.radians(psi)) * east
        # Seen by the eye, with `up` overhead, `right` lies 90 degrees clockwise, which is towards
        # smaller position angles; a mirror swaps the sides.
        right = parity * (np.sin(np.radians(psi)) * north - np.cos(np.radians(psi)) * east)
        turn = np.radians(rotation)
        for x in np.linspace(0, SIZE - 1, 4):
            for y in np.linspace(0, SIZE - 1, 4):
                dx, dy = x - (SIZE - 1) / 2, y - (SIZE - 1) / 2
                dx = -dx if flip else dx
                focal = np.array(centre) + PIXEL_MM * np.array(
                    [np.cos(turn) * dx - np.sin(turn) * dy, np.sin(turn) * dx + np.cos(turn) * dy])
                r = np.hypot(*focal) / FOCAL_MM
                t = undistorted(r, k1, k2) / r * focal / FOCAL_MM if r > 0 else np.zeros(2)
                star = ahead + t[0] * right + t[1] * up
                star /= np.linalg.norm(star)
                print(f"{name},{parity},{psi},{centre[0]},{centre[1]},{rotation},{int(flip)},"
                      f"{k1},{k2},{ra},{dec},{x},{y},"
                      f"{np.degrees(np.arctan2(star[1], star[0])) % 360:.12f},"
                      f"{np.degrees(np.arctan2(star[2], np.hypot(star[0], star[1]))):.12f}")


main()
