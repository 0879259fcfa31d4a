"""Synthetic stars for tests that make raw frames in numpy."""
import numpy as np

BETA = 3.0
FINE = 11  # points across a pixel


def moffat(width_px, dx, dy, radius):
    """Pixel means of a Moffat image of full width at half maximum `width_px`, sum 1 over the plane,
    whose centre lies (dx, dy) off the central pixel's."""
    alpha = width_px / (2 * np.sqrt(2 ** (1 / BETA) - 1))
    fine = (np.arange((2 * radius + 1) * FINE) + 0.5) / FINE - 0.5 - radius
    x, y = np.meshgrid(fine - dx, fine - dy)
    values = (BETA - 1) / (np.pi * alpha ** 2) * (1 + (x ** 2 + y ** 2) / alpha ** 2) ** -BETA
    side = 2 * radius + 1
    return values.reshape(side, FINE, side, FINE).mean(axis=(1, 3))


def add_star(image, x, y, flux, width_px, radius):
    """Adds a star of `flux` at (x, y), 0-based; what falls outside is lost."""
    i, j = int(round(x)), int(round(y))
    stamp = flux * moffat(width_px, x - i, y - j, radius)
    height, width = image.shape
    x0, x1 = max(0, i - radius), min(width, i + radius + 1)
    y0, y1 = max(0, j - radius), min(height, j + radius + 1)
    if x0 < x1 and y0 < y1:
        image[y0:y1, x0:x1] += stamp[y0 - j + radius:y1 - j + radius, x0 - i + radius:x1 - i + radius]


def scattered(random, count, width, height, margin, apart, taken=()):
    """`count` places at least `apart` from each other and from `taken`."""
    places = list(taken)
    new = []
    while len(new) < count:
        x, y = random.uniform(margin, width - margin), random.uniform(margin, height - margin)
        if all(np.hypot(x - a, y - b) >= apart for a, b in places):
            places.append((x, y))
            new.append((x, y))
    return new
