"""Write the maps, logs, camera and light curve of the invented event "Lantern 7".

Run ``python generate.py`` to rewrite the files beside this script (or name another
folder); the same files come out every time. ``campaign.toml`` is written by hand and
shows how each of them is read. Nothing here is real: not the event, the telescopes,
the continents they stand on, nor the numbers in their logs.
"""

import gzip
import io
import json
import sys
from dataclasses import dataclass
from datetime import datetime, timedelta
from pathlib import Path

import numpy as np
from astropy.coordinates import Angle
from astropy.io import fits
from astropy.table import Table
from astropy.units import deg
from astropy_healpix import HEALPix
from scipy.special import ndtr

SEED = 7
MJD_ZERO = datetime(1858, 11, 17)
PEAK = (172.0, -18.0)  # ra, dec of the middle of the brighter arc
RING_RADIUS = 62.0  # the arcs lie on a circle of this radius ...
RING_ANGLE = 55.0  # ... whose centre is seen from PEAK at this position angle
MAX_AIRMASS, MAX_SUN_ALTITUDE = 2.4, -12.5


@dataclass(frozen=True)
class Telescope:
    site: tuple[float, float] | None  # longitude, latitude
    step: tuple[float, float]  # spacing of the fields in RA·cos(dec) and dec, degrees
    seconds: float
    overhead: float
    depth: dict[str, float]  # per band, at the zenith in clear weather


TELESCOPES = {
    "heron": Telescope((-95.32, -25.41), (2.02, 2.06), 90, 26, {"g": 21.6, "r": 21.4}),
    "plover": Telescope((2.64, -19.27), (1.55, 1.15), 120, 31, {"r": 21.1, "i": 20.7}),
    "avocet": Telescope((104.87, -23.90), (1.5, 1.5), 180, 22, {"r": 19.9, "i": 19.4}),
    "dunlin": Telescope((-128.15, -20.06), (1.98, 1.98), 150, 40, {"i": 20.9, "z": 20.1}),
    "curlew": Telescope(None, (1.7, 1.7), 600, 300, {"w": 22.3}),
}

# telescope, map followed, first start (UTC), fields, one band per pass, dec from and to
PLAN = (
    ("heron", "first", "2031-03-14T05:49:30", 36, "gr", -27, 20),
    ("dunlin", "first", "2031-03-14T05:58:10", 30, "i", -60, -25),
    ("avocet", "arc", "2031-03-14T12:40:00", 24, "r", -28, 10),
    ("curlew", "arc", "2031-03-14T14:05:00", 8, "w", -16, -4),
    ("plover", "arc", "2031-03-14T20:12:40", 32, "r", -20, 20),
    ("heron", "arc", "2031-03-15T02:30:15", 18, "gr", -24, 10),
    ("dunlin", "arc", "2031-03-15T05:10:00", 14, "z", -50, -20),
    ("avocet", "update", "2031-03-15T13:20:00", 5, "ri", -60, 30),
    ("curlew", "update", "2031-03-15T14:20:00", 4, "ww", -60, 30),
    ("plover", "update", "2031-03-15T20:05:20", 7, "ri", -60, 30),
    ("heron", "update", "2031-03-16T02:41:00", 4, "gr", -60, 30),
    ("dunlin", "update", "2031-03-16T05:20:00", 2, "iz", -60, 30),
)


# --- directions -----------------------------------------------------------------------


def vectors(lon, lat):
    lon, lat = np.radians(lon), np.radians(lat)
    return np.stack([np.cos(lat) * np.cos(lon), np.cos(lat) * np.sin(lon), np.sin(lat)], -1)


def offset(ra, dec, xi, eta):
    """Direction at tangent-plane offsets (degrees, xi to the east) from a pointing."""
    a, d, xi, eta = (np.radians(x) for x in (ra, dec, xi, eta))
    below = np.cos(d) - eta * np.sin(d)
    lat = np.arctan2(np.sin(d) + eta * np.cos(d), np.hypot(xi, below))
    return np.degrees(a + np.arctan2(xi, below)) % 360, np.degrees(lat)


def on_ring(ra, dec):
    """Offsets across (outwards) and along the ring from PEAK, and along it from the far side."""
    peak = vectors(*PEAK)
    reach, angle = np.degrees(np.tan(np.radians(RING_RADIUS))), np.radians(RING_ANGLE)
    pole = vectors(*offset(*PEAK, reach * np.sin(angle), reach * np.cos(angle)))
    x_axis = (peak - pole * (peak @ pole)) / np.sin(np.radians(RING_RADIUS))
    v = vectors(ra, dec)
    turn = np.degrees(np.arctan2(v @ np.cross(pole, x_axis), v @ x_axis))
    scale = np.sin(np.radians(RING_RADIUS))
    across = np.degrees(np.arccos(np.clip(v @ pole, -1, 1))) - RING_RADIUS
    return across, turn * scale, (turn % 360 - 180) * scale


# --- maps -----------------------------------------------------------------------------


def blob(weight, across, across_sd, along, along_sd):
    distance2 = (across / across_sd) ** 2 + (along / along_sd) ** 2
    return weight / (across_sd * along_sd) * np.exp(-distance2 / 2)


def density(version, ra, dec):
    """Relative probability per solid angle of a map version, with a faint floor everywhere."""
    across, near, far = on_ring(ra, dec)
    if version == "first":
        return 1e-5 + blob(0.64, across, 1.6, near, 16) + blob(0.36, across + 1, 2.0, far, 12)
    if version == "arc":
        return 1e-6 + blob(1, across - 0.3, 1.5 + 0.02 * np.abs(near), near + 2, 14)
    main = blob(0.88, across - 3.3, 0.95, near - 6, 2.6)
    return 2e-6 + main + blob(0.12, across - 1.8, 0.8, near + 9, 1.8)


def distance_parameters(version, ra, dec, floor):
    """DISTMU and DISTSIGMA; some of the sky where only the floor is left has none to speak of."""
    across, near, _ = on_ring(ra, dec)
    slope, sigma = (1.0, 41.0) if version == "arc" else (2.0, 36.0)
    mu = np.clip(120 + slope * np.clip(near, -25, 25) - 4 * np.clip(across, -5, 5), 40, 220)
    sigma = sigma - 0.4 * np.clip(near, -25, 25)
    mu, sigma = np.round(mu * 64) / 64, np.round(sigma * 64) / 64
    mu, sigma = np.where(floor & (dec < -45), ((-1200,), (200,)), (mu, sigma))
    return np.where(floor & (dec > 50), ((np.inf,), (1,)), (mu, sigma))


def distance_moments(mu, sigma):
    """The integrals of r^k times a normal density over r ≥ 0, for k = 2, 3, 4 (by parts)."""
    x = mu / sigma
    i0 = ndtr(x)
    i1 = mu * i0 + sigma * np.exp(-0.5 * x**2) / np.sqrt(2 * np.pi)
    i2 = mu * i1 + sigma**2 * i0
    i3 = mu * i2 + 2 * sigma**2 * i1
    return i2, i3, mu * i3 + 3 * sigma**2 * i2


def short(x):
    """Values with 32 significant bits: they compress, and no processor rounds them otherwise."""
    mantissa, exponent = np.frexp(x)
    return np.ldexp(np.round(mantissa * 2.0**32), exponent - 32)


def refined_cells(version, order, share):
    """Cells of mixed orders: siblings are joined while they hold less than ``share`` together."""
    hp = HEALPix(2**order, order="nested")
    lon, lat = hp.healpix_to_lonlat(np.arange(hp.npix))
    weight = density(version, lon.deg, lat.deg)
    weight /= weight.sum()
    leaf, found = np.ones(weight.size, bool), []
    while order > 3:
        four, whole = weight.reshape(-1, 4), leaf.reshape(-1, 4)
        join = whole.all(1) & (four.sum(1) < share)
        kept = np.flatnonzero(whole & ~join[:, None])
        found.append((np.full(kept.size, order), kept, weight[kept]))
        weight, leaf, order = four.sum(1), join, order - 1
    kept = np.flatnonzero(leaf)
    found.append((np.full(kept.size, order), kept, weight[kept]))
    return (np.concatenate(part) for part in zip(*found, strict=True))


def write_fits(path, table, header):
    hdu = fits.BinTableHDU(table)
    hdu.header.update({"PIXTYPE": "HEALPIX", "COORDSYS": "C", "OBJECT": "Lantern 7", **header})
    buffer = io.BytesIO()
    fits.HDUList([fits.PrimaryHDU(), hdu]).writeto(buffer)
    path.write_bytes(gzip.compress(buffer.getvalue(), mtime=0))


def write_flat_map(path, nside=128):
    """Write the first version: every pixel in RING order, 1024 to a row, no distance."""
    hp = HEALPix(nside, order="ring")
    lon, lat = hp.healpix_to_lonlat(np.arange(hp.npix))
    prob = density("first", lon.deg, lat.deg)
    table = Table({"PROB": (prob / prob.sum()).astype("f4").reshape(-1, 1024)})
    table["PROB"].unit = "pix-1"
    pixels = {"FIRSTPIX": 0, "LASTPIX": hp.npix - 1, "INDXSCHM": "IMPLICIT"}
    write_fits(path, table, {"ORDERING": "RING", "NSIDE": nside, **pixels})


def write_multiorder_map(path, version, order, share):
    """Write a version of mixed cells with the distance layer."""
    orders, cells, prob = refined_cells(version, order, share)
    area = 4 * np.pi / (12 * 4.0**orders)
    ra, dec = np.empty(cells.size), np.empty(cells.size)
    for level in np.unique(orders):
        rows = orders == level
        lon, lat = HEALPix(2 ** int(level), order="nested").healpix_to_lonlat(cells[rows])
        ra[rows], dec[rows] = lon.deg, lat.deg
    floor = prob / area < 2 * (prob / area).min()
    mu, sigma = distance_parameters(version, ra, dec, floor)
    known = np.isfinite(mu)
    i2, i3, i4 = distance_moments(np.where(known, mu, 1), sigma)
    weight = prob * known / (prob * known).sum()  # the mean is over what has a distance
    mean = (weight * i3 / i2).sum()
    sd = np.sqrt((weight * i4 / i2).sum() - mean**2)
    table = Table({"UNIQ": cells + 4 * 4**orders, "PROBDENSITY": short(prob / area)})
    table["DISTMU"], table["DISTSIGMA"] = mu, sigma
    table["DISTNORM"] = short(np.where(known, 1 / i2, 0))
    for name, unit in zip(table.colnames[1:], ("sr-1", "Mpc", "Mpc", "Mpc-2"), strict=True):
        table[name].unit = unit
    table.sort("UNIQ")
    explicit = {"ORDERING": "NUNIQ", "INDXSCHM": "EXPLICIT", "MOCORDER": int(orders.max())}
    write_fits(path, table, {**explicit, "DISTMEAN": round(mean, 9), "DISTSTD": round(sd, 9)})


def write_dust_map(path, nside=64):
    """Write E(B−V) of an even sheet of dust, a cosecant law of Galactic latitude with a cap."""
    hp = HEALPix(nside, order="ring")
    latitude = hp.healpix_to_lonlat(np.arange(hp.npix))[1].rad
    ebv = np.minimum(0.014 / np.maximum(np.abs(np.sin(latitude)), 1e-9), 2.5)
    table = Table({"EBV": ebv.round(4).astype("f4").reshape(-1, 1024)})
    table["EBV"].unit = "mag"
    pixels = {"FIRSTPIX": 0, "LASTPIX": hp.npix - 1, "INDXSCHM": "IMPLICIT"}
    frame = {"ORDERING": "RING", "NSIDE": nside, "COORDSYS": "G", "OBJECT": "FULLSKY"}
    write_fits(path, table, {**frame, **pixels})


# --- nights ---------------------------------------------------------------------------


def altitudes(site, mjd, ra, dec):
    """Altitudes of a target and of the Sun in degrees, good to 0.1 (low-precision almanac)."""
    days = mjd - 51544.5
    anomaly = np.radians(357.528 + 0.9856003 * days)
    ecliptic = np.radians(280.46 + 0.9856474 * days)
    ecliptic += np.radians(1.915 * np.sin(anomaly) + 0.02 * np.sin(2 * anomaly))
    tilt = np.radians(23.44)
    sun_ra = np.arctan2(np.cos(tilt) * np.sin(ecliptic), np.cos(ecliptic))
    sun_dec = np.arcsin(np.sin(tilt) * np.sin(ecliptic))
    zenith = vectors(280.46062 + 360.98564737 * days + site[0], site[1])
    sun = vectors(np.degrees(sun_ra), np.degrees(sun_dec))
    return tuple(np.degrees(np.arcsin(zenith @ v)) for v in (vectors(ra, dec), sun))


def best_fields(version, step, count, dec_from, dec_to):
    """Return the most probable fields of a fixed grid of declination strips, in order of RA."""
    fields = []
    for dec in np.arange(-84, 84, step[1]):
        if dec_from <= dec <= dec_to:
            strip = round(360 / step[0] * np.cos(np.radians(dec)))
            fields += [(ra, dec) for ra in np.arange(strip) * 360 / strip if 100 < ra < 240]
    ra, dec = np.array(fields).T[:, :, None]
    xi, eta = np.meshgrid(np.linspace(-0.45, 0.45, 6), np.linspace(-0.45, 0.45, 6))
    points = offset(ra, dec, step[0] * xi.ravel(), step[1] * eta.ravel())
    score = density(version, *points).sum(1)
    chosen = np.argsort(-score, kind="stable")[:count]
    return sorted((round(float(ra[i, 0]), 4), round(float(dec[i, 0]), 4)) for i in chosen)


def observe(rng, name, version, start, count, bands, dec_from, dec_to):
    """Take one night's exposures in turn; the weather gets worse for a while."""
    scope = TELESCOPES[name]
    fields = best_fields(version, scope.step, count, dec_from, dec_to)
    mjd, taken = (datetime.fromisoformat(start) - MJD_ZERO) / timedelta(days=1), []
    total = len(bands) * len(fields)
    cloud_at, cloud_for = rng.random() * total, 1 + 0.12 * total
    for index, (band, (ra, dec)) in enumerate((b, f) for b in bands for f in fields):
        noise = 0.12 * (rng.random(3).sum() - 1.5) - 1e-9
        loss = 1.6 * rng.random() if abs(index - cloud_at) < cloud_for / 2 else 0.0
        airmass, sun = 1.0, -90.0
        if scope.site:
            altitude, sun = altitudes(scope.site, mjd, ra, dec)
            airmass = 1 / np.sin(np.radians(max(altitude, 5)))
        if airmass < MAX_AIRMASS and sun < MAX_SUN_ALTITUDE:
            depth = scope.depth[band] - 0.3 * (airmass - 1) + noise - loss
            taken.append((ra, dec, mjd, scope.seconds, band, float(depth), loss > 0.7))
        mjd += (scope.seconds + scope.overhead + 9 * rng.random()) / 86400
    return taken


# --- logs -----------------------------------------------------------------------------


def iso(mjd, hours=0):
    """Date and time to the second, on a clock so many hours ahead of UTC."""
    seconds = round(mjd * 86400 + hours * 3600)
    return f"{MJD_ZERO + timedelta(seconds=seconds):%Y-%m-%dT%H:%M:%S}"


def heron_log(rows):
    """CSV with a byte-order mark, comments, a blank line, own column names and a quality flag."""
    lines = ["# Heron, Hollow Ridge", "# times are UTC at shutter open; LIM is 5 sigma, AB"]
    lines.append("EXP,RA_DEG,DEC_DEG,UTC,EXPTIME,FILTER,LIM,FLAG")
    before = [(*row[:2], row[2] - 2.04, *row[3:6], False) for row in rows[30:34]]
    for number, (ra, dec, mjd, seconds, band, depth, cloud) in enumerate(before + rows, 9):
        limit = {21: "N/A", 60: f">{depth:.1f}", 61: f">{depth:.1f}"}.get(number, f"{depth:.2f}")
        flag = "CLOUD" if cloud else "GOOD"
        lines.append(f"{number:04d},{ra:.4f},{dec:.4f},{iso(mjd)},{seconds},{band},{limit},{flag}")
    lines.insert(40, lines[39])  # the archive delivered one row twice
    lines.insert(80, "# telescope stuck for a minute, focus checked")
    lines.insert(81, "")
    return "\ufeff" + "\n".join(lines) + "\n"


def plover_log(rows):
    """CSV with sexagesimal positions, local zone times, a position angle and empty limits."""
    lines = ["exposure,ra,dec,angle,start,duration,band,depth"]
    for number, (ra, dec, mjd, seconds, band, depth, _) in enumerate(rows):
        earlier, later = (
            altitudes(TELESCOPES["plover"].site, mjd + t, ra, dec)[0] for t in (-0.003, 0.003)
        )
        angle = 8.5 if later > earlier else 188.5  # turned over past the meridian
        limit = "" if number % 13 == 5 else f"{depth:.2f}"
        where = Angle(ra, "deg").to_string("hourangle", sep=":", precision=2, pad=True)
        where += "," + Angle(dec, "deg").to_string(sep=":", precision=1, pad=True, alwayssign=True)
        night = "a" if rows[0][2] + 0.5 > mjd else "b"
        when = f"{iso(mjd, 1)}+01:00"
        lines.append(f"{night}{number:03d},{where},{angle},{when},{seconds},{band},{limit}")
    return "\n".join(lines) + "\n"


def avocet_log(rows):
    """Semicolons, decimal commas, MJD, magnitudes in the Vega system with -99 for none."""
    lines = ["frame;ra;dec;mjd;seconds;filter;maglim;sky"]
    for number, (ra, dec, mjd, seconds, band, depth, cloud) in enumerate(rows):
        limit = "-99" if number % 11 == 7 else f"{depth:.2f}"
        values = (f"{number + 1:05d}", f"{ra:.4f}", f"{dec:.4f}", f"{mjd:.6f}", f"{seconds:.1f}")
        sky = "cirrus" if cloud else "clear"
        lines.append(";".join((*values, band, limit, sky)).replace(".", ","))
    return "\n".join(lines) + "\n"


def dunlin_log(rows):
    """ECSV with the names of the executed-observation standard; two detectors side by side."""
    kept = []
    for number, (ra, dec, mjd, seconds, band, depth, _) in enumerate(rows):
        aborted = number % 17 == 9
        detectors = []
        for west, east in ((-1, -0.02), (0.02, 1)):
            corners = offset(ra, dec, np.array([west, east, east, west]), np.array([-1, -1, 1, 1]))
            detectors.append(" ".join(f"{x:.5f}" for pair in zip(*corners) for x in pair))
        parts = " ".join(f"POLYGON {text}" for text in detectors)
        region = f"UNION ICRS ({parts})"
        if number % 10 == 4:  # one detector was down
            region = f"POLYGON ICRS {detectors[0]}"
        elif number % 10 == 8:
            region = f"polygon {detectors[1]} {' '.join(detectors[1].split()[:2])}"
        seconds = 31 if aborted else seconds
        status = "Aborted" if aborted else "Performed"
        row = (f"dun-{number:04d}", ra, dec, region, round(mjd, 6))
        row += (round(mjd + seconds / 86400, 6), float(seconds), status, band, round(depth, 2))
        kept.append(row)
    names = ("obs_id", "s_ra", "s_dec", "s_region", "t_min", "t_max", "t_exptime")
    units = {"s_ra": "deg", "s_dec": "deg", "t_min": "d", "t_max": "d", "t_exptime": "s"}
    table = Table(rows=kept, names=(*names, "execution_status", "band", "depth"), units=units)
    text = io.StringIO()
    table.write(text, format="ascii.ecsv")
    return text.getvalue()


def hexagon_moc(ra, dec, order=10, radius=1.05):
    """Return the cells of a hexagonal field by order, siblings joined (a MOC)."""
    hp = HEALPix(2**order, order="nested")
    cone = np.sort(hp.cone_search_lonlat(ra * deg, dec * deg, 1.1 * radius * deg))
    lon, lat = hp.healpix_to_lonlat(cone)
    v = vectors(lon.deg, lat.deg)
    centre, east = vectors(ra, dec), vectors(ra + 90, 0)
    xi = np.degrees(v @ east / (v @ centre))
    eta = np.degrees(v @ np.cross(centre, east) / (v @ centre))
    sides = [abs(xi * np.cos(a) + eta * np.sin(a)) for a in np.radians((30, 90, 150))]
    cells, moc = cone[np.max(sides, 0) < radius * np.sqrt(3) / 2], {}
    while cells.size:
        parents, counts = np.unique(cells // 4, return_counts=True)
        full = parents[counts == 4]
        moc[str(order)] = [int(c) for c in cells if c // 4 not in full]
        cells, order = full, order - 1
    return {key: moc[key] for key in sorted(moc, key=int) if moc[key]}


def curlew_log(rows, folder):
    """CSV whose regions are MOC files, one per field: most JSON, every third ASCII."""
    folder.mkdir(parents=True, exist_ok=True)
    lines, names = ["exposure,start,duration,band,depth,region"], {}
    for number, (ra, dec, mjd, seconds, band, depth, _) in enumerate(rows, 1):
        if (ra, dec) not in names:
            moc, stem = hexagon_moc(ra, dec), f"field{len(names) + 1:02d}"
            if len(names) % 3 == 2:
                names[ra, dec] = f"{stem}.txt"
                text = " ".join(f"{k}/{','.join(map(str, v))}" for k, v in moc.items())
            else:
                names[ra, dec] = f"{stem}.json"
                text = json.dumps(moc, separators=(",", ":"))
            (folder / names[ra, dec]).write_text(text + "\n", encoding="utf-8")
        limit = "" if number == 6 else f"{depth:.2f}"
        where = f"{folder.name}/{names[ra, dec]}"
        lines.append(f"orbit-{412 + number},{iso(mjd)}Z,{seconds},{band},{limit},{where}")
    return "\n".join(lines) + "\n"


def heron_camera():
    """Corner offsets of 32 detectors, 8 across and 4 up, with gaps between them."""
    lines = ["detector,xi,eta"]
    for number, (row, column) in enumerate(np.ndindex(4, 8), 1):
        xi, eta = (column - 3.5) * 0.262, (row - 1.5) * 0.53
        for x, y in ((-1, -1), (1, -1), (1, 1), (-1, 1)):
            lines.append(f"D{number:02d},{xi + 0.12 * x:.4f},{eta + 0.25 * y:.4f}")
    return "\n".join(lines) + "\n"


def ember_light_curve():
    """Absolute magnitudes of a source that peaks later in redder bands (a parabola in log time)."""
    lines = ["# days since the event, absolute AB magnitude; invented", "days,band,magnitude"]
    for band, peak_days, peak in (("g", 0.6, -15.6), ("r", 0.9, -16.1), ("i", 1.3, -16.2)):
        for days in (0.05, 0.1, 0.2, 0.35, 0.6, 0.9, 1.3, 2, 3, 4.5):
            magnitude = peak + 0.9 * np.log(days / peak_days) ** 2
            lines.append(f"{days:g},{band},{magnitude:.2f}")
    return "\n".join(lines) + "\n"


# What the teams have announced; some of it was counted in another way than the tally counts.
CLAIMS = """# what was stated in the first circulars, to be checked
telescope,map,quantity,value,stated_by,where
all,3 update,probability,81 %,the coordinators,circular 7
all,,area,454 deg2,the coordinators,circular 7
Heron,,first_start,2031-03-14T05:49Z,the Heron team,circular 1
Heron,,area,411 deg2,the Heron team,circular 3
Plover,,exposures,46,the Plover team,circular 4
Avocet,3 update,probability,32 %,the Avocet team,circular 5
"""


def main(folder):
    for name in ("maps", "logs", "cameras", "sources"):
        (folder / name).mkdir(parents=True, exist_ok=True)
    write_flat_map(folder / "maps/first.fits.gz")
    write_multiorder_map(folder / "maps/arc.fits.gz", "arc", order=8, share=3e-4)
    write_multiorder_map(folder / "maps/update.fits.gz", "update", order=9, share=3e-4)
    write_dust_map(folder / "maps/dust.fits.gz")
    curve = ember_light_curve()
    (folder / "sources/ember.csv").write_text(curve, encoding="utf-8", newline="\n")

    rng = np.random.default_rng(SEED)
    taken = {name: [] for name in TELESCOPES}
    for name, *block in PLAN:
        taken[name] += observe(rng, name, *block)
    logs = {
        "heron.csv": heron_log(taken["heron"]),
        "plover.csv": plover_log(taken["plover"]),
        "avocet.csv": avocet_log(taken["avocet"]),
        "dunlin.ecsv": dunlin_log(taken["dunlin"]),
        "curlew.csv": curlew_log(taken["curlew"], folder / "logs/curlew"),
    }
    for name, text in logs.items():
        (folder / "logs" / name).write_text(text, encoding="utf-8", newline="\n")
    (folder / "cameras/heron.csv").write_text(heron_camera(), encoding="utf-8", newline="\n")
    (folder / "claims.csv").write_text(CLAIMS, encoding="utf-8", newline="\n")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
