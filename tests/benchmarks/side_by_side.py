"""Time `habitat bands` on a large grid beside a straightforward script, in one run, and compare their answers.

usage: python tests/benchmarks/side_by_side.py [--rounds 5] [--size NT NZ NY NX]

The grid generator and the script are those under ../shared/bench; both programs read the same netCDF file and write
thickness, edges and number of bands. Prints the medians of interleaved rounds, their ratio, peak memory, and the
largest difference between the two answers. Times differ between machines; the ratio is what to quote.
"""

import argparse
import statistics
import subprocess
import sys
import tempfile
import time
from pathlib import Path

import numpy as np
import xarray as xr

SHARED = Path(__file__).parents[3] / "shared" / "bench"
SPECIES = """
name = "Benchmark animal"
reference_temperature = 10.0
[supply_capacity]
value = 1.10
unit = "umol/g/h/kPa"
activation_energy = 0.30
[resting_rate]
value = 2.40
unit = "umol/g/h"
activation_energy = 0.62
"""


def measured(command: list[str]) -> tuple[float, float]:
    """Wall time [s] and peak memory [MiB] of a command."""
    probe = (
        "import resource, subprocess, sys; subprocess.run(sys.argv[1:], check=True, stdout=subprocess.DEVNULL); "
        "print(resource.getrusage(resource.RUSAGE_CHILDREN).ru_maxrss / 1024)"
    )
    begun = time.perf_counter()
    done = subprocess.run([sys.executable, "-c", probe, *command], check=True, capture_output=True, text=True)
    return time.perf_counter() - begun, float(done.stdout)


def compare(ours: Path, theirs: Path) -> None:
    """Print the largest differences between the two answers."""
    with xr.open_dataset(ours) as a, xr.open_dataset(theirs) as b:
        a = a.isel(activity=0).rename(latitude="lat", longitude="lon")
        for name in ("thickness", "upper", "lower"):
            difference = np.abs(a[name].transpose("time", "lat", "lon").to_numpy() - b[name].to_numpy())
            print(f"largest difference in {name}: {np.nanmax(difference):.4f} m")
        wet = np.isfinite(b["thickness"].to_numpy())
        counts = a["band_count"].transpose("time", "lat", "lon").to_numpy()[wet]
        print(f"columns with another number of bands: {int((counts != b['band_count'].to_numpy()[wet]).sum())}")


def main() -> None:
    """Run the comparison."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--rounds", type=int, default=5)
    parser.add_argument("--size", type=int, nargs=4, default=(12, 57, 180, 360), metavar=("NT", "NZ", "NY", "NX"))
    options = parser.parse_args()
    with tempfile.TemporaryDirectory() as name:
        folder = Path(name)
        grid, species = folder / "grid.nc", folder / "animal.toml"
        species.write_text(SPECIES)
        size = [str(number) for number in options.size]
        subprocess.run([sys.executable, str(SHARED / "make_grid.py"), str(grid), *size, "1"], check=True)
        cli = "from habitat.cli import main; main()"
        arguments = [str(grid), "--species", str(species), "--activity", "2", "--out", str(folder / "ours.nc")]
        commands = {
            "habitat bands": [sys.executable, "-c", cli, "bands", *arguments],
            "straight script": [
                *(sys.executable, str(SHARED / "straight_script.py"), str(grid), str(folder / "theirs.nc")),
                *("--route", "insitu"),
            ],
        }
        results: dict[str, list[tuple[float, float]]] = {label: [] for label in commands}
        for _ in range(options.rounds):
            for label, command in commands.items():
                results[label].append(measured(command))
        medians = {}
        for label, runs in results.items():
            medians[label] = statistics.median(seconds for seconds, _ in runs)
            memory = max(mebibytes for _, mebibytes in runs)
            spread = f"{min(s for s, _ in runs):.1f}-{max(s for s, _ in runs):.1f}"
            print(f"{label}: median {medians[label]:.2f} s ({spread}), peak {memory:.0f} MiB")
        print(f"ratio straight script / habitat: {medians['straight script'] / medians['habitat bands']:.2f}")
        compare(folder / "ours.nc", folder / "theirs.nc")


if __name__ == "__main__":
    main()
