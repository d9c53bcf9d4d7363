"""Make the records in this folder: one invented bench session, simulated.

Three loop coils of our own, one after the other over the same round water phantom at 63.87 MHz:

loop_40mm.dx            well shimmed, quiet (JCAMP-DX)
loop_40mm_shots.nc      the same coil, eight shots while the field drifts (netCDF)
loop_60mm_shim.csv      the phantom off centre, so the line is broad and lopsided (text table)
loop_80mm_noisy.npz     an open cable: noise, mains pick-up, DC offset, long dead time (numpy)
bench_check.py          a chain of steps for all of them, for `fidkit measure --chain`

Run it again with `python data_demo/make_demo.py [FOLDER]`: the same files come out.
"""

import sys
from pathlib import Path

import numpy as np
import xarray as xr

import fidkit as fk
from fidkit.simulate import Receiver, Sample, simulate_fid, sphere_sample

CARRIER = 63.87e6
PHANTOM = "water sphere 30 mm, copper sulphate"
#: Converter of 16 bit over 2 V either way. Rounding to its steps also makes the files the same
#: on machines whose sines differ in the last bit.
STEP = 4 / 2**16


def record(sample: Sample, coil: str, seed: int, **more: object) -> xr.DataArray:
    """One shot through one coil."""
    return simulate_fid(
        sample,
        carrier_frequency=CARRIER,
        pulse_duration=20e-6,
        units="V",
        coil=coil,
        sample_name=PHANTOM,
        seed=seed,
        **more,
    )


def session() -> dict[str, xr.DataArray]:
    """The records by file name."""
    clean = record(
        Sample([137.4], 0.8, t1=0.12, t2=0.05),
        "loop 40 mm",
        seed=401,
        points=4096,
        dwell_time=100e-6,
        dead_time=50e-6,
        receiver=Receiver(phase=25, noise=2.5e-3, digitizer_step=STEP),
    )
    shots = [
        record(
            Sample([137.4 + 0.35 * shot], 0.8, t1=0.12, t2=0.05),
            "loop 40 mm",
            seed=410 + shot,
            points=1024,
            dwell_time=200e-6,
            dead_time=50e-6,
            receiver=Receiver(phase=25, noise=0.02, digitizer_step=STEP),
        )
        for shot in range(8)
    ]
    repeats = fk.from_array(
        np.stack([shot.values for shot in shots]).astype(np.complex64),
        dwell_time=200e-6,
        time_start=50e-6,
        carrier_frequency=CARRIER,
        dims=("shot",),
        coords={"shot": np.arange(1, 9)},
        units="V",
        sample=PHANTOM,
        coil="loop 40 mm",
        source="simulated",
    )
    poor_shim = record(
        sphere_sample(offset=-212.0, linear=14.0, quadratic=5.0, amplitude=0.7, t1=0.12, t2=0.05),
        "loop 60 mm",
        seed=601,
        points=2048,
        dwell_time=200e-6,
        dead_time=50e-6,
        receiver=Receiver(phase=-70, noise=4e-3, digitizer_step=STEP),
    )
    noisy = record(
        Sample([331.0], 0.4, t1=0.12, t2=0.05),
        "loop 80 mm",
        seed=801,
        points=4096,
        dwell_time=100e-6,
        dead_time=600e-6,
        receiver=Receiver(
            phase=140, noise=0.05, offset=0.012 - 0.02j, mains=0.015, digitizer_step=STEP
        ),
    )
    return {
        "loop_40mm.dx": clean,
        "loop_40mm_shots.nc": repeats,
        "loop_60mm_shim.csv": poor_shim,
        "loop_80mm_noisy.npz": noisy,
    }


def main(folder: Path) -> None:
    """Write the records and the chain."""
    for name, fid in session().items():
        fk.write(fid, folder / name)
    chain = fk.Chain(
        [
            fk.Call("remove_offset", tail=0.2),
            fk.Call("apodize_exponential", broadening=2.0),
            fk.Call("zero_fill", factor=4.0),
            "fourier_transform",
        ],
        title="bench check of a loop coil",
    )
    chain.save(folder / "bench_check.py")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
