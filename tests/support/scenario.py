"""Writes scenario files for benches: square detectors in a grid, sixteen amplifiers each."""


def layout(side):
    width, rows = side // 8, side // 2
    lines = [f"  bench:\n    size: [{side}, {side}]\n    prescan: 8\n    overscan: 32\n    amplifiers:"]
    for half in range(2):
        for place in range(8):
            left = place % 2 == 0
            x = place * width + (1 if left else width)
            y = 1 if half == 0 else side
            lines.append(
                f"      - {{id: a{half * 8 + place + 1:02d}, node: [{x}, {y}], "
                f"serial: [{1 if left else -1}, 0], parallel: [0, {1 if half == 0 else -1}], "
                f"ticks: {width}, rows: {rows}}}")
    return "\n".join(lines)


def detectors(count, side, pixel_um=15):
    across = int(count ** 0.5 + 0.999)
    pitch = side * pixel_um / 1000 + 0.5
    lines = []
    for i in range(count):
        x = (i % across - (across - 1) / 2) * pitch
        y = (i // across - (across - 1) / 2) * pitch
        lines.append(f"  - {{id: d{i + 1}, layout: bench, centre_mm: [{x:.3f}, {y:.3f}], "
                     f"columns_towards: [1, 0], rows_towards: [0, 1], clock: main, board: b{i // 4 + 1}}}")
    return "\n".join(lines)


def scenario(count, side, stars_folder, exposures=1, field_radius_deg=1.0):
    shots = "\n".join(
        f"  - {{id: bench-{i + 1:04d}, kind: sky, mjd: {61426.18 + 0.001 * i:.6f}, exposure_s: 30, "
        f"filter: r, field: plane, offset_arcsec: [{40 * i}, {-30 * i}], camera_angle_deg: 0, "
        f"seeing_arcsec: 1.05, sky_mag: 20.9}}" for i in range(exposures))
    return f"""format: straymark-scenario/1
camera: bench
seed: 7
site: {{latitude_deg: 31.2, longitude_deg: -110.4, height_m: 2120}}
telescope:
  focal_length_mm: 8280
  aperture_mm: 2300
  obstruction_mm: 920
  mirrored: false
  stretch: [0.0, 0.0]
  pointing_error_arcsec: 3
  camera_angle_error_deg: 0.02
  struts:
    - {{angle_deg: 41, width_mm: 14, inner_mm: 460, outer_mm: 1150}}
filters:
  r: {{wavelength_nm: 622, width_nm: 138, zero_point: 25.9, extinction: 0.1}}
seeing: {{moffat_beta: 3.0, ellipticity: 0.05, axis_deg: 25}}
silicon: {{pixel_um: 15, full_well_e: [110000, 130000], pixel_response: 0.004, cosmic_rays_per_cm2_s: 0.02}}
amplifiers: {{gain_e_per_adu: [1.4, 2.2], read_noise_e: [4.5, 7.0], bias_adu: [900, 1300], bias_drift_adu: 1.5, converter_max_adu: 65535}}
coupling:
  device: {{strength: [2.0e-4, 2.0e-3], fall_per_channel: 0.75, negative_fraction: 0.25, zero_fraction: 0.03}}
  board: {{strength: [2.0e-5, 1.0e-4], negative_fraction: 0.3, zero_fraction: 0.1}}
  rest: {{strength: [1.0e-7, 1.0e-5], negative_fraction: 0.3, zero_fraction: 0.3}}
  derivative: {{fraction: 0.15, ratio: [0.2, 0.9]}}
  tail: {{fraction: 0.12, ratio: [0.05, 0.3], decay: 0.25}}
  delay: {{fraction: 0.08, longest_ticks: 2}}
  bend: {{fraction: 0.12, ratio: [-0.6, 0.6], onset_adu: [22000, 42000], width_adu: 9000}}
characterisation: {{error_floor: 2.0e-6, relative_error: 0.01}}
timing: {{clear_s: 1.0, readout_s: 22.0}}
layouts:
{layout(side)}
detectors:
{detectors(count, side)}
stars: {{faintest_simulated: 20.5, faintest_listed: 19.0, position_error_arcsec: 0.05, magnitude_error: 0.03}}
fields:
  plane: {{ra_deg: 84.0, dec_deg: 28.0, bright_stars: {stars_folder}/tycho2_ra084_dec28.csv, bright_radius_deg: 2.5, radius_deg: {field_radius_deg}, complete_to: 10.5}}
exposures:
{shots}
"""
