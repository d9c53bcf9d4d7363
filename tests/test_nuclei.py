"""Nuclei against CODATA (through scipy and written out), IUPAC and a second table."""

import math

import numpy as np
import pytest
from scipy import constants

import fidkit as fk
from fidkit.nuclei import NUCLEI, PROTON_BARE, PROTON_SHIELDED, find_nucleus

#: Digits in which the constants are printed.
PRINTED = 1e-9
#: How far the CODATA tables of 2014, 2018 and 2022 are apart.
BETWEEN_YEARS = 2e-8
#: Digits in which the frequency ratios are printed.
RATIO_PRINTED = 1e-6

BARE_2022 = (42.577478461e6, 0.018)
SHIELDED_2022 = (42.57638543e6, 0.17)


def relative(value, wanted):
    return abs(value / wanted - 1)


def test_proton_is_codata_2022():
    # Source: CODATA 2022, proton gyromagnetic ratio in MHz/T, free and shielded (water, sphere)
    assert relative(PROTON_BARE[0], 42.577478461e6) < PRINTED
    assert relative(PROTON_SHIELDED[0], 42.57638543e6) < PRINTED
    assert PROTON_BARE[1] == 0.018
    assert PROTON_SHIELDED[1] == 0.17
    # the same in rad/(s T)
    assert relative(2 * math.pi * PROTON_BARE[0], 2.6752218708e8) < PRINTED
    assert relative(2 * math.pi * PROTON_SHIELDED[0], 2.675153194e8) < PRINTED


@pytest.mark.parametrize(
    ("name", "value", "wanted"),
    [
        ("proton gyromag. ratio in MHz/T", PROTON_BARE, BARE_2022),
        ("shielded proton gyromag. ratio in MHz/T", PROTON_SHIELDED, SHIELDED_2022),
    ],
)
def test_proton_is_what_scipy_says(name, value, wanted):
    # Source: scipy.constants, whichever CODATA year the installed scipy carries
    number, unit, std = constants.physical_constants[name]
    assert unit == "MHz T^-1"
    assert relative(value[0], number * 1e6) < BETWEEN_YEARS
    if relative(number * 1e6, wanted[0]) < 1e-12:  # that year: then the uncertainty too
        assert relative(value[1], std * 1e6) < 1e-6


@pytest.mark.parametrize(
    ("bare", "shielded"),
    [
        (42.57747892, 42.57638507),  # CODATA 2014
        (42.577478518, 42.57638474),  # CODATA 2018
        (42.577478461, 42.57638543),  # CODATA 2022
    ],
)
def test_older_constants_still_agree(bare, shielded):
    # Source: CODATA 2014, 2018, 2022
    assert relative(PROTON_BARE[0], bare * 1e6) < BETWEEN_YEARS
    assert relative(PROTON_SHIELDED[0], shielded * 1e6) < BETWEEN_YEARS


def test_shielding_of_the_proton():
    # Source: CODATA 2022, proton magnetic shielding correction 2.567 15(41)e-5
    assert abs(PROTON_SHIELDED[0] / PROTON_BARE[0] - 1 + 2.567158e-5) < 1e-8
    ratio = fk.larmor_frequency(1.0, "1H") / fk.larmor_frequency(1.0, "1H", shielding="bare")
    assert abs((ratio - 1) * 1e6 + 25.67) < 0.01  # ppm


@pytest.mark.parametrize(
    ("field", "shielding", "megahertz"),
    [
        (1.5, "bare", 63.866218),
        (3.0, "bare", 127.732435),
        (1.5, "shielded", 63.864578),
        (3.0, "shielded", 127.729156),
    ],
)
def test_proton_in_common_fields(field, shielding, megahertz):
    # Source: product of the CODATA 2022 constants and the field
    frequency = fk.larmor_frequency(field, shielding=shielding)
    assert abs(frequency - megahertz * 1e6) < 1.0  # Hz: the values above are rounded to 1 Hz
    if shielding == "bare":
        # Source: handbook values 63.87 and 127.7 MHz (from memory), to half their last digit
        handbook, half_digit = {1.5: (63.87, 0.005), 3.0: (127.7, 0.05)}[field]
        assert abs(frequency / 1e6 - handbook) < half_digit


#: Frequency ratio in per cent, magnetogyric ratio in 1e7 rad/(s T), and how far one is from the
#: other relative to the proton. Source: Harris et al., Pure Appl. Chem. 73, 1795-1818 (2001).
HARRIS = {
    "1H": (100.0, 26.7522128, 0.0),
    "2H": (15.350609, 4.10662791, -8e-8),
    "3He": (76.179437, -20.3801587, -2.3e-5),
    "7Li": (38.863797, 10.3977013, -7.5e-5),
    "13C": (25.145020, 6.728284, -2.1e-4),
    "15N": (10.136767, -2.71261804, None),
    "19F": (94.094011, 25.18148, -3.7e-4),
    "23Na": (26.451900, 7.0808493, -6.2e-4),
    "31P": (40.480742, 10.8394, -9.1e-4),
    "129Xe": (27.810186, -7.452103, -1.65e-3),
}


def test_the_table_holds_these_nuclei():
    assert list(NUCLEI) == list(HARRIS)


@pytest.mark.parametrize("name", HARRIS)
def test_ratios(name):
    # Source: Harris et al. 2001
    ratio, magnetogyric, between = HARRIS[name]
    nucleus = find_nucleus(name)
    assert relative(nucleus.frequency_ratio, ratio) < RATIO_PRINTED
    assert relative(nucleus.magnetogyric_ratio, magnetogyric) < RATIO_PRINTED
    if between is not None:
        found = ratio / 100 / (abs(magnetogyric) / 26.7522128) - 1
        assert abs(found - between) < 1e-5
    shielded, bare = nucleus.hertz_per_tesla("shielded"), nucleus.hertz_per_tesla("bare")
    if name != "2H":  # the two conventions must not be mixed
        assert relative(shielded, bare) > 1e-5


@pytest.mark.parametrize(
    ("name", "g_factor", "megahertz_per_tesla", "bound"),
    [
        # Source: g factors of the isotope table of the PyPI package mendeleev 1.3.0, times
        # mu_N/h = 7.622593219 MHz/T; an independent table, good to 1e-3 (xenon 2e-3)
        ("2H", 0.8574382, 6.535903, 1e-3),
        ("3He", -4.2552505, 32.436043, 1e-3),
        ("7Li", 2.170938, 16.548177, 1e-3),
        ("13C", 1.404738, 10.707746, 1e-3),
        ("19F", 5.256642, 40.069243, 1e-3),
        ("23Na", 1.478333, 11.268734, 1e-3),
        ("31P", 2.261850, 17.241163, 1e-3),
        ("129Xe", -1.555922, 11.860161, 2e-3),
    ],
)
def test_second_table(name, g_factor, megahertz_per_tesla, bound):
    magneton = 7.622593219
    assert abs(abs(g_factor) * magneton - megahertz_per_tesla) < 1e-5
    assert relative(fk.larmor_frequency(1.0, name), megahertz_per_tesla * 1e6) < bound
    assert (
        relative(fk.larmor_frequency(1.0, name, shielding="bare"), megahertz_per_tesla * 1e6)
        < bound
    )


def test_helium_three_to_proton():
    # Source: CODATA 2022, shielded helion to shielded proton magnetic moment ratio
    # -0.761 786 1334(31); the frequency ratio is 1.1e-5 higher (another reference compound)
    ratio = fk.larmor_frequency(1.0, "3He") / fk.larmor_frequency(1.0, "1H")
    assert relative(ratio, 0.7617861334) < 2e-5


@pytest.mark.parametrize(
    ("name", "megahertz"),
    [
        # Source: Harris et al. 2001 on top of the shielded proton of CODATA 2022
        ("2H", 9.8036),
        ("3He", 48.6517),
        ("7Li", 24.8202),
        ("13C", 16.0588),
        ("19F", 60.0927),
        ("23Na", 16.8934),
        ("31P", 25.8529),
        ("129Xe", 17.7609),
    ],
)
def test_nuclei_at_one_and_a_half_tesla(name, megahertz):
    #: The ratios refer to tetramethylsilane, the constant to water: 5 ppm, and the values above
    #: are printed to 0.1 kHz.
    convention, printed = 5e-6, 0.05e-3 / megahertz
    assert relative(fk.larmor_frequency(1.5, name), megahertz * 1e6) < convention + printed


@pytest.mark.parametrize("name", HARRIS)
@pytest.mark.parametrize("shielding", ["shielded", "bare"])
def test_field_from_frequency_is_the_way_back(name, shielding):
    frequency = fk.larmor_frequency(1.4998, name, shielding=shielding)
    back = fk.field_from_frequency(frequency, name, shielding=shielding)
    assert relative(back, 1.4998) < 4 * np.finfo(float).eps


def test_names():
    assert find_nucleus("^1h") is NUCLEI["1H"]
    with pytest.raises(fk.FidkitError, match=r"nucleus must be one of 1H, 2H.*got '7H'"):
        find_nucleus("7H")
    with pytest.raises(fk.FidkitError, match="shielding must be 'shielded' or 'bare'"):
        fk.larmor_frequency(1.0, shielding="half")
