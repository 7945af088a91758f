"""Mean free volume in time, with nothing but h5py and matplotlib.

python scripts/plot_with_h5py.py cages.h5 free-volume.png
"""

import sys

import h5py
from matplotlib import pyplot as plt

with h5py.File(sys.argv[1]) as file:
    n = file["trajcage/frames_complete"][()]  # later rows are not finished
    mean = file["observables/free_volume_mean"]
    plt.plot(mean["time"][:n], mean["value"][:n], "o-")
plt.xlabel("time")
plt.ylabel("mean free volume")
plt.savefig(sys.argv[2])
