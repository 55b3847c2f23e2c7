"""Writes the response functions of the invented imager Tarn: `python srf/make_tarn.py`.

Flat-topped curves exp(-ln 2 |2 d / width|**4) with a tilt, so that they are
smooth and slightly asymmetric, sampled every 1/80 of the width.
"""

from pathlib import Path

import numpy as np

# id, words, centre [um], full width at half maximum [um], tilt
CHANNELS = (
    ("sw038", "shortwave infrared", 3.85, 0.25, 0.15),
    ("wv063", "upper-level water vapour", 6.30, 0.75, -0.12),
    ("wv069", "mid-level water vapour", 6.95, 0.45, 0.10),
    ("wv073", "lower-level water vapour", 7.35, 0.30, 0.12),
    ("ir085", "cloud phase", 8.55, 0.40, -0.10),
    ("oz097", "ozone", 9.65, 0.38, 0.08),
    ("ir104", "clean infrared window", 10.45, 0.60, 0.12),
    ("ir112", "infrared window", 11.20, 0.70, -0.14),
    ("ir123", "dirty infrared window", 12.30, 0.90, -0.10),
    ("co133", "carbon dioxide", 13.30, 0.60, 0.14),
)


def response(wavelength, centre, width, tilt):
    """Relative response at wavelengths [um]."""
    d = (wavelength - centre) / width
    return np.exp(-np.log(2.0) * np.abs(2.0 * d) ** 4) * (1.0 + tilt * np.tanh(2.0 * d))


def main(folder=Path(__file__).parent / "tarn"):
    """Write one text file for each channel."""
    folder.mkdir(exist_ok=True)
    for name, words, centre, width, tilt in CHANNELS:
        wavelength = centre + width * np.arange(-80, 81) / 80.0 * 0.95
        values = response(wavelength, centre, width, tilt)
        values /= values.max()
        keep = values > 2e-4
        rows = [f"{w:.5f} {v:.5f}" for w, v in zip(wavelength[keep], values[keep])]
        text = [f"# Tarn, channel {name}: {words} (an invented imager)", "# wavelength [um]  relative response [1]"]
        (folder / f"{name}.txt").write_text("\n".join(text + rows) + "\n")
    lines = [
        'id = "tarn"',
        'name = "Tarn ten-channel infrared imager (invented)"',
        "sub_satellite_longitude = 40.0",
        "",
    ]
    for name, words, *_ in CHANNELS:
        lines += ["[[channel]]", f'id = "{name}"', f'name = "{words}"', f'response = "{name}.txt"', ""]
    (folder / "imager.toml").write_text("\n".join(lines))


if __name__ == "__main__":
    main()
