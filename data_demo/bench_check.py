"""Saved by fidkit 0.1.0: bench check of a loop coil"""

import fidkit as fk


def process(fid):
    fid = fk.remove_offset(fid, tail=0.2)  # tail [fraction]
    fid = fk.apodize_exponential(fid, broadening=2.0)  # broadening [Hz]
    fid = fk.zero_fill(fid, factor=4.0)
    spectrum = fk.fourier_transform(fid)
    return spectrum
