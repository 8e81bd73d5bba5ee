"""What a study need not say: values that every study shares, and those that each kind of image brings.

Keys are those of the study file, `table.key`. Values are starting points from practice unless a source is named; a
study that says otherwise wins.
"""

from collections.abc import Mapping
from typing import Any

# Shared by all kinds of image.
DEFAULTS: Mapping[str, Any] = {
    "study.allow_outside": False,
    "image.gamma": 1.0,  # a linear camera
    "image.max_megapixels": 400.0,
    "image.block_megapixels": 25.0,  # a worker then needs less than 4 GB, and pictures of usual cameras stay whole
    "scale.pixel_size_um": None,
    "scale.pixel_size_se_um": None,
    "scale.scale_conflict": "stop",
    "scale.magnification": "none",
    "scale.camera_factor": None,
    "scale.camera_factor_se": None,
    "scale.reference_axial_length_mm": 24.0,  # about that of an eye without ametropia
    "scale.disc_diameter_um": None,
    "scale.disc_diameter_se_um": None,  # the spread between people
    "segment.method": "ridge",
    "segment.false_alarms_per_mpx": 30.0,
    "segment.crossing_probability": 0.5,  # the more probable reading wins
    "segment.parameters": {},
    "radius.profile": "auto",
    "radius.blur_px": "auto",
    "radius.plasma_layer_um": 0.0,
    "radius.plasma_layer_se_um": 0.0,
    "classes.probability": 0.8,
    "shape.zone_dd": [0.5, 1.0],  # Knudtson et al., Curr Eye Res 2003;27:143-149
    "shape.calibre_formula": "knudtson",
    "shape.calibre_um": [10.0, 25.0, 50.0],
    "blood.law": "pries-in-vivo",
    "blood.hematocrit": 0.45,  # systemic, of healthy adults
    "blood.hematocrit_se": 0.0,
    "blood.plasma_viscosity_mpa_s": 1.2,  # at 37 degrees Celsius
    "blood.plasma_viscosity_se_mpa_s": 0.0,
    "blood.viscosity_mpa_s": 3.0,
    "blood.hematocrit_split": False,
    "blood.split_law": "2005",
    "blood.diameter_scaling": "none",  # sources differ on whether the laws already hold the scaling of rats' cells
    "blood.red_cell_volume_fl": None,
    "blood.density_kg_m3": 1050.0,  # at 37 degrees Celsius: Trudnowski & Rico, Clin Chem 1974;20:615-616
    "blood.heart_rate_per_min": None,
    "blood.parameters": {},
    "network.terminals": "auto",
    "network.drive_mmhg": 1.0,  # resistance does not depend on it
    "network.target_wall_shear_pa": None,
    "network.target_wall_shear_sd_pa": None,  # half of the targets' mean
    "network.target_pressure_mmhg": None,
    "network.target_pressure_sd_mmhg": None,  # half of the targets' mean
    "network.intervals": "auto",
    "network.draws": 1000,  # a bound of a 95 % interval then errs by about 2 % of its width
    "network.seed": 0,
    "run.image_timeout_s": 7200.0,  # an image of 400 megapixels takes about an hour
    "run.memory_limit_mb": None,
    "output.overlay": True,
    "output.colour": "radius",
    "output.print": False,
}

# Largest vessels asked for: retinal trunks are below 100 um in radius; the field of a microscope holds smaller ones.
PRESETS: Mapping[str, Mapping[str, Any]] = {
    "fundus": {  # colour photograph of a retina: blood absorbs green light
        "image.channel": "green",
        "image.polarity": "dark",
        "image.plane": "mean",
        "segment.radius_um": [4.0, 120.0],
        "segment.overlap_adds": True,
        "classes.method": "colour",  # venous blood absorbs more red light than arterial blood
        "network.trees_by_class": True,  # its capillaries are not seen
        "shape.disc": "find",
    },
    "angiogram": {  # contrast agent or flow signal makes vessels bright
        "image.channel": "luminance",
        "image.polarity": "bright",
        "image.plane": "max",
        "segment.radius_um": [3.0, 120.0],
        "segment.overlap_adds": False,  # often a maximum over depth: overlaps tell nothing
        "classes.method": "none",
        "network.trees_by_class": False,
        "shape.disc": "none",
    },
    "fluorescence": {  # labelled plasma or vessel wall under a microscope
        "image.channel": "luminance",
        "image.polarity": "bright",
        "image.plane": "max",
        "segment.radius_um": [1.5, 60.0],
        "segment.overlap_adds": True,
        "classes.method": "none",
        "network.trees_by_class": False,
        "shape.disc": "none",
    },
    "intravital": {  # transmitted or reflected light: columns of red cells absorb green
        "image.channel": "green",
        "image.polarity": "dark",
        "image.plane": "mean",
        "segment.radius_um": [2.0, 60.0],
        "segment.overlap_adds": True,
        "classes.method": "none",
        "network.trees_by_class": False,
        "shape.disc": "none",
    },
}

# Dead ends shorter than this are noise of a mask's outline: measured on rods with half a pixel of edge noise.
SPUR_RADII = 1.2
SPUR_PX = 3.0
