"""Holds the files of made maps against general libraries: `simulate.py REFERENCE FOLDER...`.

REFERENCE is a folder whose maps are .npy files in double precision; the other folders hold
the same maps in other formats. Prints the name of every folder that holds them.
"""

import json
import pathlib
import sys

import numpy
import tifffile
from PIL import Image


def stored(path):
    """The numbers of a map file, the row stored first in front."""
    if path.suffix == ".npy":
        return numpy.load(path, allow_pickle=False)
    if path.suffix == ".npz":
        with numpy.load(path, allow_pickle=False) as archive:
            return archive["map"]
    if path.suffix == ".tiff":
        return tifffile.imread(path)
    if path.suffix == ".txt":
        return numpy.loadtxt(path)
    with Image.open(path) as image:
        numbers = numpy.asarray(image)
    # Pillow turns the rows of a PFM file into those of a picture.
    return numbers[::-1] if path.suffix == ".pfm" else numbers


def check(path, reference):
    description = json.loads(path.with_suffix(".map.json").read_text())
    numbers = stored(path)
    assert numbers.shape == reference.shape, (path, numbers.shape)
    kind = numbers.dtype.kind
    if "value_scale" in description:
        assert kind in "iu" or path.suffix == ".txt", (path, numbers.dtype)
        step, offset = description["value_scale"], description["value_offset"]
        levels = numbers.astype("f8")
        if "blank_value" in description:
            levels[numbers == description["blank_value"]] = numpy.nan
            # The levels at both ends hold what is beyond them.
            inside = (numbers > numpy.iinfo(numbers.dtype).min + 1) & (
                numbers < numpy.iinfo(numbers.dtype).max)
        else:
            inside = numpy.isfinite(levels)
        assert (numpy.isnan(levels) == numpy.isnan(reference)).all(), path
        off = numpy.abs(offset + step * levels - reference)[inside]
        assert inside.sum() > 0.3 * inside.size, (path, inside.sum())
        # Rounding is off by half a step at most.
        assert off.max() <= 0.5000001 * abs(step), (path, off.max(), step)
        return
    assert kind == "f" or path.suffix == ".txt", (path, numbers.dtype)
    single = reference.astype("f4")
    wanted = reference if numbers.dtype.itemsize == 8 and path.suffix != ".txt" else single
    assert (numbers.astype(wanted.dtype).tobytes() == wanted.tobytes()), path


def main():
    reference, *folders = map(pathlib.Path, sys.argv[1:])
    maps = {path.stem: stored(path) for path in reference.glob("*.npy")}
    for folder in folders:
        files = [p for p in folder.iterdir() if p.suffix not in (".json", ".jsonl", ".csv", ".toml")]
        assert sorted(p.stem for p in files) == sorted(maps), folder
        for path in files:
            check(path, maps[path.stem])
        print(folder.name)


if __name__ == "__main__":
    main()
