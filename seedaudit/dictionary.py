"""What every column and every map means, in one place: written beside each file of a result."""

from __future__ import annotations

SHARE, Z, MM, COUNT = "share, 0 to 1", "Fisher z", "mm", "count"

COLUMNS: dict[str, dict[str, tuple[str, str]]] = {
    "placements": {
        "seed": ("name of the seed", ""),
        "placement": ("number of the placement; 0 is the reported one", ""),
        "kind": ("reported, jitter, lattice or control", ""),
        "x": ("centre, left to right", MM),
        "y": ("centre, posterior to anterior", MM),
        "z": ("centre, inferior to superior", MM),
        "dx": ("shift from the reported centre, to the right", MM),
        "dy": ("shift from the reported centre, to the front", MM),
        "dz": ("shift from the reported centre, upwards", MM),
        "distance": ("length of the shift", MM),
        "radius": ("radius of the sphere", MM),
        "n_voxels": ("mask voxels in the sphere", COUNT),
        "coverage": ("share of the whole sphere inside the mask", SHARE),
        "used": ("false: set aside", ""),
        "flags": (
            "what is odd about the sphere: midline (crosses x = 0), leaves_mask, leaves_image, "
            "one_voxel, low_coverage (less than min_coverage in the mask), missing_in_data (less "
            "than min_coverage with a signal in some participant), repeat (same voxels as an "
            "earlier placement)",
            "",
        ),
    },
    "similarity": {
        "seed": ("name of the seed", ""),
        "placement": ("number of the placement; 0 is the reported one itself", ""),
        "distance": ("length of the shift", MM),
        "threshold": ("rule and level that made the classes", ""),
        "n_positive": ("voxels of the placement's map in class +", COUNT),
        "n_negative": ("voxels of the placement's map in class -", COUNT),
        "dice_positive": ("Dice with the reported map, class +; n/a when both are empty", SHARE),
        "dice_negative": ("Dice with the reported map, class -; n/a when both are empty", SHARE),
        "spatial_r": ("spatial Pearson correlation of the effect maps", "-1 to 1"),
        "concordance": ("Lin's concordance of the effect maps", "-1 to 1"),
        "rms_difference": ("root mean square difference of the effect maps", Z),
    },
    "pairs": {
        "seed": ("name of the seed", ""),
        "placement_a": ("number of one drawn placement", ""),
        "placement_b": ("number of another", ""),
        "dice_positive": ("Dice of the two maps, class +", SHARE),
        "dice_negative": ("Dice of the two maps, class -", SHARE),
        "spatial_r": ("spatial Pearson correlation of the effect maps", "-1 to 1"),
    },
    "regions": {
        "seed": ("name of the seed", ""),
        "index": ("label of the region", ""),
        "region": ("name of the region", ""),
        "n_voxels": ("analysis voxels of the region", COUNT),
        "reported_positive": ("share of the region's voxels in class + as reported", SHARE),
        "reported_negative": ("share of the region's voxels in class - as reported", SHARE),
        "reported_effect": ("mean effect over the region as reported", Z),
        "reported_low": ("lower end of its 95 % bootstrap interval over participants", Z),
        "reported_high": ("upper end of that interval", Z),
        "effect_mean": ("mean of the region's effect over drawn placements", Z),
        "effect_sd": ("standard deviation over drawn placements", Z),
        "effect_min": ("smallest over drawn placements", Z),
        "effect_max": ("largest over drawn placements", Z),
        "sign_share": ("share of drawn placements with the reported sign", SHARE),
        "dice_positive_mean": ("mean Dice with the reported map inside the region, +", SHARE),
        "dice_positive_p05": ("5th percentile of that Dice", SHARE),
        "dice_positive_undefined": ("drawn placements where both maps are empty there", COUNT),
        "dice_negative_mean": ("mean Dice with the reported map inside the region, -", SHARE),
        "dice_negative_p05": ("5th percentile of that Dice", SHARE),
        "dice_negative_undefined": ("drawn placements where both maps are empty there", COUNT),
        "pairwise_agreement": ("share of pairs of placements that agree on a voxel", SHARE),
        "stability": ("stability score: Gwet's AC1 over the region's voxels", "at most 1"),
        "stability_low": ("lower end of its 95 % delete-a-fold jackknife interval", ""),
        "stability_high": ("upper end of that interval", ""),
        "ceiling": ("stability of the reported placement across halves of participants", ""),
        "ceiling_relative": ("cross-half similarity, shifted over same", ""),
        "state": (
            "held (connected as reported), silent (never connected), lost, gained, contested, "
            "or n/a without analysis voxels",
            "",
        ),
    },
    "thresholds": {
        "seed": ("name of the seed", ""),
        "rule": ("density: top share of voxels by |t|; effect: smallest |effect|", ""),
        "cut": ("value of the rule", "share or Fisher z"),
        "dice_positive_mean": ("mean Dice with the reported map, +", SHARE),
        "dice_negative_mean": ("mean Dice with the reported map, -", SHARE),
        "dice_positive_undefined": ("drawn placements without a Dice, +", COUNT),
        "dice_negative_undefined": ("drawn placements without a Dice, -", COUNT),
        "n_positive": ("mean map size, +", "voxels"),
        "n_negative": ("mean map size, -", "voxels"),
    },
    "participants": {
        "participant_id": ("label of the participant", ""),
        "n_runs": ("runs", COUNT),
        "n_volumes": ("volumes of all runs", COUNT),
        "n_censored": ("censored volumes", COUNT),
        "residual_df": ("residual degrees of freedom of all runs", COUNT),
        "n_missing_voxels": ("mask voxels without a varying signal in every run", COUNT),
        "median_spatial_r": (
            "median over drawn placements of the spatial correlation with the reported "
            "placement's map, in this participant",
            "-1 to 1",
        ),
        "min_spatial_r": ("smallest of these", "-1 to 1"),
        "used": ("false: set aside", ""),
        "reason": ("why set aside", ""),
    },
}

MAPS: dict[str, tuple[str, str]] = {
    "agreement_positive": ("share of drawn placements with the voxel in class +", SHARE),
    "agreement_negative": ("share of drawn placements with the voxel in class -", SHARE),
    "modal_class": ("most frequent class over drawn placements", "-1, 0, 1"),
    "modal_share": ("share of drawn placements in the most frequent class", SHARE),
    "safe": ("class that at least the safe share of drawn placements agree on", "-1, 0, 1"),
    "contested": ("1 where a tail holds the voxel in some placements, but not safely", "0, 1"),
    "conjunction": ("smallest |t| over all placements with its sign; 0 if signs differ", "t"),
    "effect_reported": ("group effect of the reported placement", Z),
    "effect_mean": ("mean group effect over drawn placements", Z),
    "effect_sd": ("standard deviation of the group effect over drawn placements", Z),
    "effect_range": ("largest minus smallest group effect over drawn placements", Z),
    "placement_to_sampling": ("effect_sd over the standard error as reported", "ratio"),
    "t_reported": ("test statistic of the reported placement", "t"),
    "class_reported": ("class of the reported placement", "-1, 0, 1"),
    "analysis_mask": ("1 where a voxel is analysed: the mask without the cloud's spheres", "0, 1"),
    "region_labels": ("label of the network region of each mask voxel, 0 for none", "label"),
    "anatomy": ("picture under the figures, 0 to 1", ""),
}

INTEGER_MAPS = ("contested", "analysis_mask")
"""Stored as uint8; all others as float32, missing voxels as NaN."""
