"""Print the oxygen of each source at the last age of a hand-off file: needs h5py only."""

import sys

import h5py

with h5py.File(sys.argv[1], "r") as file:
    species = [name.decode() for name in file["species"][:]]
    oxygen = species.index("O")
    for z, row in zip(file["metallicity"][:], file["total"][:, -1, :, oxygen], strict=True):
        print(" ".join(f"{value:.17g}" for value in (z, *row)))
