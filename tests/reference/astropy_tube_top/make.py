#!/usr/bin/env python3
"""Position angle of the tube's top, hour angle and altitude, by astropy's frames.

The zenith is approached through AltAz at zero pressure, the pole of date through TETE (true equator
and equinox): the position angle, in ICRS at the boresight, of a point 0.05 degree up that circle.
UT1 - UTC and polar motion are set to zero.

    python3 make.py > tube_top.csv
"""

import warnings

from astropy import units as u
from astropy.coordinates import erfa_astrom
from astropy.coordinates import ICRS, TETE, AltAz, EarthLocation, SkyCoord
from astropy.time import Time
from astropy.utils import iers

erfa_astrom.get_polar_motion = lambda time: (0.0, 0.0)
iers.conf.auto_download = False
iers.conf.iers_degraded_accuracy = "ignore"
warnings.simplefilter("ignore")

SITES = [(31.2, -110.4, 2120.0), (-30.24, -70.74, 2715.0), (0.0, 20.0, 10.0)]
FIELDS = [(0.0, 10.0), (83.6, 22.0), (190.0, 30.0), (359.99, -45.0), (266.4, -29.0), (40.0, 85.0)]
DATES = [61041.25, 61132.6, 61223.9]  # 2026-01-01, 2026-04-02, 2026-07-02


def main():
    print("latitude_deg,longitude_deg,height_m,ra_deg,dec_deg,mjd,"
          "zenith_deg,pole_deg,altitude_deg,azimuth_deg")
    step = 0.05 * u.deg
    for latitude, longitude, height in SITES:
        place = EarthLocation.from_geodetic(longitude * u.deg, latitude * u.deg, height * u.m)
        for mjd in DATES:
            time = Time(mjd, format="mjd", scale="utc", location=place)
            time.delta_ut1_utc = 0.0
            frame = AltAz(obstime=time, location=place, pressure=0 * u.hPa)
            of_date = TETE(obstime=time, location=place)
            for ra, dec in FIELDS:
                field = SkyCoord(ra * u.deg, dec * u.deg)
                seen = field.transform_to(frame)
                if seen.alt < 5 * u.deg:
                    continue
                up = SkyCoord(az=seen.az, alt=seen.alt + step, frame=frame).transform_to(ICRS())
                true = field.transform_to(of_date)
                north = SkyCoord(ra=true.ra, dec=true.dec + step, frame=of_date)
                north = north.transform_to(ICRS())
                print(f"{latitude},{longitude},{height},{ra},{dec},{mjd},"
                      f"{field.position_angle(up).deg:.6f},{field.position_angle(north).deg:.6f},"
                      f"{seen.alt.deg:.6f},{seen.az.deg:.6f}")


main()
