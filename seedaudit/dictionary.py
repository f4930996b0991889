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
        "ceiling_relative": (
            "spatial correlation of the placement's map in one half of the participants with the "
            "reported map in the other half, over that of the reported map with itself",
            "ratio",
        ),
    },
    "controls": {
        "seed": ("name of the seed", ""),
        "placement": ("number of the control seed, which is unrelated to the reported one", ""),
        "distance": ("distance from the reported centre", MM),
        "n_positive": ("voxels of the control's map in class +", COUNT),
        "n_negative": ("voxels of the control's map in class -", COUNT),
        "dice_positive": (
            "Dice with the reported map, class +, outside the control's own sphere and margin",
            SHARE,
        ),
        "dice_negative": ("the same for class -", SHARE),
        "spatial_r": ("spatial Pearson correlation with the reported effect map there", "-1 to 1"),
    },
    "ceiling": {
        "seed": ("name of the seed", ""),
        "region": ("name of the region; n/a for the whole map", ""),
        "measure": ("spatial_r, ac1 (Gwet's AC1 of two maps), dice_positive or dice_negative", ""),
        "n_splits": (
            "half-splits of the participants behind it (of one participant: of the time series)",
            COUNT,
        ),
        "same": ("ceiling: the reported map in one half with itself in the other half", ""),
        "same_low": ("lower end of its 95 % delete-a-fold jackknife interval", ""),
        "same_high": ("upper end of that interval", ""),
        "shifted": (
            "the reported map in one half with a drawn placement's map in the other half, mean "
            "over placements",
            "",
        ),
        "shifted_low": ("lower end of its 95 % interval", ""),
        "shifted_high": ("upper end of that interval", ""),
        "relative": (
            "ceiling-relative stability, shifted over same: 1 where moving the seed costs nothing "
            "beyond sampling; n/a where the ceiling is below 0.05 or not above 0 beyond chance",
            "ratio",
        ),
        "relative_low": ("lower end of its 95 % interval", "ratio"),
        "relative_high": ("upper end of that interval", "ratio"),
    },
    "decay": {
        "seed": ("name of the seed", ""),
        "measure": ("dice_positive, dice_negative, spatial_r or ceiling_relative", ""),
        "direction": (
            "all, or the axis sector of the shifts: left, right, anterior, posterior, superior, "
            "inferior",
            "",
        ),
        "distance": ("length of the shift; the last row is the farthest placement", MM),
        "fitted": ("falling isotonic fit of the similarity with the reported placement", ""),
        "n": ("placements behind the fit", COUNT),
        "ceiling": ("similarity of the reported placement to itself across halves", ""),
        "floor": ("median similarity of the control seeds to the reported placement", ""),
        "geometry": (
            "spatial correlation that overlap and smoothness alone would give two spheres at that "
            "distance",
            "",
        ),
    },
    "tolerance": {
        "seed": ("name of the seed", ""),
        "measure": ("dice_positive, dice_negative or ceiling_relative", ""),
        "target": ("similarity that the fit must keep", ""),
        "direction": ("all, or an axis sector, as in the table of decay", ""),
        "tolerance": ("distance at which the fit falls below the target", MM),
        "censored": ("true: it does not within the cloud; read `tolerance` as at least", ""),
        "n": ("placements behind the fit", COUNT),
        "farthest": ("farthest of them", MM),
    },
    "claims": {
        "seed": ("name of the seed", ""),
        "claim": ("name of the claim", ""),
        "target": ("region, or coordinate and radius in mm", ""),
        "direction": ("positive, negative, or the contrast that is claimed to be above 0", ""),
        "n_voxels": ("analysis voxels of the target", COUNT),
        "reported_effect": ("effect on the mean over the target as reported", Z),
        "reported_low": ("lower end of its 95 % bootstrap interval over participants", Z),
        "reported_high": ("upper end of that interval", Z),
        "reported_t": ("its test statistic", "t"),
        "passes_reported": ("true: passes the rule at the reported placement", ""),
        "share_passing": (
            "share of drawn placements where the mean over the target reaches, in the claimed "
            "direction, what the rule asks of a voxel of that placement's map",
            SHARE,
        ),
        "first_failure_mm": ("smallest shift at which it does not; n/a when it always does", MM),
        "effect_min": ("smallest effect over drawn placements", Z),
        "effect_max": ("largest effect over drawn placements", Z),
        "largest_difference": (
            "effect minus that as reported, where the claim weakens most (among the placements "
            "where it fails, if any, and of these among the significant ones)",
            Z,
        ),
        "difference_p": (
            "family-wise p of that paired difference over all drawn placements, by the maximum "
            "statistic over sign flips or permutations of the participants",
            "",
        ),
        "difference_p_holm": ("the same, adjusted for all claims about the seed (Holm)", ""),
        "equivalent": (
            "true: two one-sided tests put the difference within the smallest effect of interest "
            "at the safe share of drawn placements",
            "",
        ),
        "verdict": ("holds, breaks or open", ""),
        "note": ("what else must be said", ""),
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
        "ceiling": (
            "Gwet's AC1 of the reported map in one half of the participants with itself in the "
            "other half",
            "at most 1",
        ),
        "ceiling_relative": ("the same with shifted maps in the other half, over it", "ratio"),
        "placement_share": (
            "share of the variance of the region's effect that comes from where the seed was put, "
            "the rest from who was scanned",
            SHARE,
        ),
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
        "mean_motion": (
            "mean over the volumes of framewise_displacement or, without it, of the column that "
            "censors volumes; n/a without either",
            "as in the confounds table",
        ),
        "median_spatial_r": (
            "median over drawn placements of the spatial correlation with the reported "
            "placement's map, in this participant",
            "-1 to 1",
        ),
        "min_spatial_r": ("smallest of these", "-1 to 1"),
        "influence": (
            "relative change of the mean (over regions) spread of the group effect over "
            "placements when the participant comes in; above 0, it adds instability",
            "ratio",
        ),
        "used": ("false: set aside", ""),
        "reason": ("why set aside", ""),
    },
}

COLUMNS_WHERE_ASKED: dict[str, dict[str, tuple[str, str]]] = {
    "steadier": {
        "seed": ("name of the reported seed", ""),
        "x": ("centre of the candidate, left to right; the first row is the reported seed", MM),
        "y": ("centre of the candidate, posterior to anterior", MM),
        "z": ("centre of the candidate, inferior to superior", MM),
        "moved_mm": ("distance from the reported centre", MM),
        "n_neighbours": (
            "lattice points within the placement error that it is compared with",
            COUNT,
        ),
        "stability_in": (
            "mean spatial Pearson correlation of the candidate's map with the maps of its "
            "neighbours, in all participants; a map is the mean z over participants, never the "
            "group effect of interest",
            "-1 to 1",
        ),
        "stability_out": (
            "the same in the half of the participants that had no part in a choice, mean over "
            "the splits",
            "-1 to 1",
        ),
        "gain": (
            "stability_out minus that of the reported seed; at a recommended move, the gain of the "
            "whole search in participants who had no part in the choice",
            "",
        ),
        "gain_low": ("lower end of its 95 % delete-a-fold jackknife interval", ""),
        "gain_high": ("upper end of that interval", ""),
        "similarity_to_reported": (
            "spatial Pearson correlation with the map of the reported seed, in all participants",
            "-1 to 1",
        ),
        "keeps_identity": (
            "true: as similar to the reported map as was asked (keep_similarity)",
            "",
        ),
        "share_chosen": ("share of the choices, one in each half, that fell on it", SHARE),
        "on_front": ("true: no candidate that moves as little is as steady, or steadier", ""),
        "recommended": ("true: where the seed should be; the first row means keep it", ""),
    },
    "radii": {
        "seed": ("name of the seed", ""),
        "index": ("label of the region", ""),
        "region": ("name of the region", ""),
        "source": (
            "where the variation of the region's mean z over participants, drawn positions and "
            "radii comes from; residual: what is left, the interaction of all of them",
            "",
        ),
        "variance": ("variance component; an estimate below 0 counts as 0", "squared Fisher z"),
        "share": ("share of the sum of the region's components", SHARE),
    },
    "seeds": {
        "seed_a": ("name of one seed", ""),
        "seed_b": ("name of another", ""),
        "distance_mm": ("between the reported centres", MM),
        "spatial_r": (
            "spatial Pearson correlation of the two reported effect maps, in the same participants",
            "-1 to 1",
        ),
        "dice_positive": ("Dice of the two reported maps, class +", SHARE),
        "dice_negative": ("Dice of the two reported maps, class -", SHARE),
        "within_a": (
            "median spatial correlation of the drawn placements of seed a with its reported one, "
            "in the same participants",
            "-1 to 1",
        ),
        "within_b": ("the same for seed b", "-1 to 1"),
        "ceiling": (
            "what independent halves of the participants allow: geometric mean of the two maps' "
            "spatial correlations with themselves across halves",
            "",
        ),
        "relative": (
            "spatial correlation of the two reported maps across halves, over that ceiling",
            "ratio",
        ),
        "relative_low": ("lower end of its 95 % delete-a-fold jackknife interval", "ratio"),
        "relative_high": ("upper end of that interval", "ratio"),
        "relative_within_a": (
            "5th percentile of the same ratio over the drawn placements of seed a with its "
            "reported one",
            "ratio",
        ),
        "relative_within_b": ("the same for seed b", "ratio"),
        "interchangeable": (
            "true: no less alike than placements of one seed are, beyond the noise of the "
            "participants; false: less alike; n/a: too few participants to tell",
            "",
        ),
    },
}
"""Tables of a section or of several seeds, which are there where the study asked for them."""

ALL_COLUMNS = COLUMNS | COLUMNS_WHERE_ASKED

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

MAPS_WHERE_ASKED: dict[str, tuple[str, str]] = {
    "steadier_score": (
        "held-out stability of the nearest candidate of the search for a steadier seed, in voxels "
        "that hold a candidate or lie within half a step of one along every axis; candidates of "
        "another network are left out",
        "-1 to 1",
    ),
}
"""Maps of a section, which are there where the study asked for them."""

ALL_MAPS = MAPS | MAPS_WHERE_ASKED

PLACEMENT_COMPONENTS = (
    "effect maps of all used placements in little space: volume 0 is their mean, the others are "
    "components; values are 8-bit codes from 1 to 255, 0 outside the analysis voxels, and a map is "
    "the sum over volumes of (code - 128) * step * weight, where the weight of the mean is 1"
)

INTEGER_MAPS = ("contested", "analysis_mask")
"""Stored as uint8; all others as float32, missing voxels as NaN."""
