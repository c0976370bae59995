"""Invented results on which figures, tables and files are tried."""

import numpy as np
import pytest
import xarray as xr

from dosekit.basis.components import COMPONENTS
from dosekit.basis.materials import material
from dosekit.grids.voxels import VoxelGrid

HEIGHTS = {
    "primary": 1.0,
    "in_flight": 0.1,
    "star_light": 0.8,
    "star_heavy": 0.4,
    "star_neutron": 0.15,
    "star_photon": 0.01,
    "decay": 0.02,
    "contaminant_muon": 0.05,
    "contaminant_electron": 0.06,
}


@pytest.fixture(scope="module")
def curve():
    """A depth curve with a peak at 120 mm in its star parts; all parts distinct."""
    depth_mm = np.arange(0.5, 200.0, 1.0)
    energy = np.zeros((len(COMPONENTS), depth_mm.size))
    let = np.full_like(energy, np.nan)
    for i, name in enumerate(COMPONENTS):
        if name.startswith("star"):
            energy[i] = HEIGHTS[name] * np.exp(-0.5 * ((depth_mm - 120.0) / 6.0) ** 2)
        else:
            energy[i] = 0.3 * HEIGHTS[name] * (depth_mm < 125.0)
        let[i] = 1.0 + i
    return xr.Dataset(
        {
            "energy": (("component", "depth"), energy, {"units": "MeV/mm per incident particle"}),
            "let_dose": (("component", "depth"), let, {"units": "keV/um"}),
            "stops": ("depth", np.exp(-0.5 * ((depth_mm - 120.0) / 5.0) ** 2) / 12.5, {"units": "1/mm"}),
        },
        coords={"component": list(COMPONENTS), "depth": depth_mm},
        attrs={"yields": "evaluated", "sources": ["invented for a test"]},
    )


@pytest.fixture(scope="module")
def anatomy():
    """A small box of water with a target off its middle and an organ; identity planted where DICOM keeps it."""
    shape = (12, 16, 20)  # z, y, x
    density = np.ones(shape, dtype=np.float32)
    density[:, :2, :] = 0.001
    target = np.zeros(shape, dtype=np.float32)
    target[4:8, 8:12, 5:10] = 1.0
    organ = np.zeros(shape, dtype=np.float32)
    organ[9:11, 13:15, 12:16] = 1.0
    return VoxelGrid(
        (-30.0, -20.0, -15.0),
        (3.0, 2.5, 4.0),
        density,
        np.zeros(shape, dtype=np.uint16),
        (material("water"),),
        structures={"Target": target, "cord": organ},
        name="box",
        source={"kind": "test", "patient_name": "PLANTED^NAME"},
        dicom_reference={"PatientName": "PLANTED^NAME", "PatientID": "PLANTED-ID"},
    )


@pytest.fixture(scope="module")
def dose(anatomy):
    """A dose map whose maximum lies in the target; each component a fixed share of one shape."""
    z, y, x = np.meshgrid(*(anatomy.centres_mm(axis) for axis in "zyx"), indexing="ij")
    cx, cy, cz = anatomy.centroid_mm("target")
    shape = np.exp(-(((x - cx) / 15) ** 2 + ((y - cy) / 9) ** 2 + ((z - cz) / 12) ** 2))
    parts = np.stack([2.0 * HEIGHTS[name] / sum(HEIGHTS.values()) * shape for name in COMPONENTS]).astype(np.float32)
    return xr.Dataset(
        {"dose": (("component", "z", "y", "x"), parts, {"units": "Gy"})},
        coords={"component": list(COMPONENTS), **{axis: anatomy.centres_mm(axis) for axis in "xyz"}},
        attrs={"dose_to": "medium"},
    )
