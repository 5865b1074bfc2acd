"""Makes asteroids.csv: orbits of invented minor planets that cross the fields of
the demonstration survey in its nights, and where the station sees them then.

The Earth is ERFA's, the orbits are ellipses about the Sun; nothing of nightsift is
used. Run: /usr/bin/python3 makeasteroids.py > asteroids.csv
"""
import erfa
import numpy as np

K2 = 0.01720209895 ** 2  # au^3/d^2, Gauss
LIGHT = 173.144632674  # au/d
OBLIQUITY = np.radians(84381.406 / 3600)
EPOCH = 61480.0  # MJD TT of the elements
FIRST, NIGHTS = 61466, (0, 4, 9, 13, 20, 28)  # MJD of the first evening, days after it
FIELDS = ((148.21, -8.43, 19.35), (171.94, 4.72, 20.55), (196.38, -14.19, 23.45))  # deg, deg, h UTC
LONGITUDE, LATITUDE, HEIGHT = 21.4, -31.8, 1720.0  # of the station
EACH = 12  # for each field and night
HALF = 300.0  # arcsec, half the side of a field
LIMIT = 20.1  # mag, signal to noise 10 on an ordinary frame

to_equator = np.array([[1, 0, 0], [0, np.cos(OBLIQUITY), -np.sin(OBLIQUITY)], [0, np.sin(OBLIQUITY), np.cos(OBLIQUITY)]])


def observer(utc):
    """Heliocentric place and velocity of the station [au, au/d], ICRS axes."""
    tai1, tai2 = erfa.utctai(2400000.5, utc)
    tt1, tt2 = erfa.taitt(tai1, tai2)
    earth = erfa.epv00(tt1, tt2)[0]
    theta = erfa.era00(2400000.5, utc)
    site = erfa.pvtob(np.radians(LONGITUDE), np.radians(LATITUDE), HEIGHT, 0, 0, 0, theta)
    back = erfa.c2i06a(tt1, tt2).T
    return earth["p"] + back @ site["p"] / 149597870700.0, earth["v"] + back @ site["v"] * 86400 / 149597870700.0


def tt(utc):
    a, b = erfa.taitt(*erfa.utctai(2400000.5, utc))
    return (a - 2400000.5) + b


def elements(r, v, t):
    """Osculating elements at EPOCH from a state at t [MJD TT]."""
    r, v = to_equator.T @ r, to_equator.T @ v
    n = np.linalg.norm(r)
    a = 1 / (2 / n - v @ v / K2)
    h = np.cross(r, v)
    e = np.cross(v, h) / K2 - r / n
    ecc = np.linalg.norm(e)
    node = np.arctan2(h[0], -h[1])
    incl = np.arccos(h[2] / np.linalg.norm(h))
    line = np.array([np.cos(node), np.sin(node), 0])
    peri = np.arctan2(np.cross(h / np.linalg.norm(h), line) @ e, line @ e)
    if a <= 0 or ecc >= 1:
        return None
    big = np.arctan2(r @ v / np.sqrt(K2 * a), 1 - n / a)
    mean = big - ecc * np.sin(big) + np.sqrt(K2 / a ** 3) * (EPOCH - t)
    return a, ecc, incl, node % (2 * np.pi), peri % (2 * np.pi), mean % (2 * np.pi)


def place(el, t):
    a, ecc, incl, node, peri, mean = el
    m = mean + np.sqrt(K2 / a ** 3) * (t - EPOCH)
    big = m
    for _ in range(50):
        big -= (big - ecc * np.sin(big) - m) / (1 - ecc * np.cos(big))
    x, y = a * (np.cos(big) - ecc), a * np.sqrt(1 - ecc ** 2) * np.sin(big)
    cp, sp, cn, sn, ci, si = np.cos(peri), np.sin(peri), np.cos(node), np.sin(node), np.cos(incl), np.sin(incl)
    p = np.array([cp * cn - sp * sn * ci, cp * sn + sp * cn * ci, sp * si])
    q = np.array([-sp * cn - cp * sn * ci, -sp * sn + cp * cn * ci, cp * si])
    return to_equator @ (x * p + y * q)


def seen(el, utc):
    """Astrometric direction [rad], distances [au] from the station and the Sun."""
    o, t, delay = observer(utc)[0], tt(utc), 0.0
    for _ in range(5):
        r = place(el, t - delay)
        d = r - o
        delay = np.linalg.norm(d) / LIGHT
    ra, dec = erfa.c2s(d)
    return ra % (2 * np.pi), dec, np.linalg.norm(d), np.linalg.norm(r), d, r


def main():
    rng = np.random.default_rng(20270302)
    print("designation,epoch_mjd,mean_anomaly_deg,perihelion_deg,node_deg,inclination_deg,eccentricity,semi_major_au,h_mag,g_slope,uncertainty,"
          "field,night,mid_mjd,ra_deg,dec_deg,east_arcsec_d,north_arcsec_d,mag")
    number = 0
    for k, (ra0, dec0, hour) in enumerate(FIELDS):
        for n, day in enumerate(NIGHTS):
            utc = FIRST + day + hour / 24
            made = 0
            while made < EACH:
                # Near the middle more often, so that small fields have some too.
                xi, eta = rng.uniform(-1, 1, 2) * HALF * rng.uniform(0.15, 0.8)
                dec = np.radians(dec0 + eta / 3600)
                ra = np.radians(ra0) + np.radians(xi / 3600) / np.cos(dec)
                rate, angle = np.radians(rng.uniform(20, 45) * 24 / 3600), np.radians(rng.uniform(240, 300))
                u = np.array([np.cos(dec) * np.cos(ra), np.cos(dec) * np.sin(ra), np.sin(dec)])
                east = np.array([-np.sin(ra), np.cos(ra), 0])
                north = np.cross(u, east)
                o, vo = observer(utc)
                distance, radial = rng.uniform(1.0, 2.2), rng.uniform(-0.006, 0.006)
                r = o + distance * u
                v = vo + distance * rate * (np.sin(angle) * east + np.cos(angle) * north) + radial * u
                el = elements(r, v, tt(utc) - distance / LIGHT)
                mag = rng.uniform(LIMIT - 2.5, LIMIT + 0.3)
                if el is None or not (2.0 < el[0] < 3.6 and el[1] < 0.3 and el[2] < np.radians(35)):
                    continue
                made += 1
                number += 1
                a, d, away, sun, line, helio = seen(el, utc)
                before, after = seen(el, utc - 1 / 96), seen(el, utc + 1 / 96)
                de = (after[0] - before[0]) * np.cos(d) * 48
                dn = (after[1] - before[1]) * 48
                phase = np.arccos(line @ helio / (away * sun))
                w = np.tan(phase / 2)
                g = 0.15
                dim = -2.5 * np.log10((1 - g) * np.exp(-3.33 * w ** 0.63) + g * np.exp(-1.87 * w ** 1.22))
                h = mag - 5 * np.log10(away * sun) - dim
                deg = np.degrees
                print(f"M{number:05d},{EPOCH:.1f},{deg(el[5]):.7f},{deg(el[4]):.7f},{deg(el[3]):.7f},{deg(el[2]):.7f},{el[1]:.9f},{el[0]:.9f},{h:.3f},{g:.2f},1,"
                      f"{k},{n},{utc:.6f},{deg(a):.7f},{deg(d):.7f},{deg(de) * 3600:.3f},{deg(dn) * 3600:.3f},{mag:.3f}")


main()
