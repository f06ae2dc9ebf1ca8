"""The one registry of flags: every code that a result may carry, with the sentence that explains it and the remedy.

Flags make a site `flagged` or `failed`; notes (second table) stand beside a good result.
"""

from __future__ import annotations

from .records import Flag

FLAGS: dict[str, str] = {
    "no_readings": "The site has no usable reading. Measure it again, or take it off the sheet.",
    "no_mode_possible": "No film inside the fit windows explains most of these readings. Check prism index, base "
    "angle, angle sign and units, or widen the windows in the stack file.",
    "prism_below_film": "The prism index does not exceed the film's: the lowest modes cannot be coupled. Use a prism "
    "of higher index, or narrow the film's index window if it is known to be lower.",
    "loose_direction": "The readings leave a combination of the unknowns undetermined.",
    "order_ambiguous": "More than one assignment of mode numbers fits; the others are listed as rivals.",
    "label_doubtful": "The mode numbers as typed do not fit, others do. Check the labels.",
    "polarisation_doubtful": "All readings fit if TE and TM are exchanged. Check the polarisation column.",
    "poor_fit": "The readings scatter more than their stated uncertainty allows; uncertainties have been enlarged.",
    "many_rejected": "So many readings fit no mode that the rest cannot be checked. Check the sheet and the "
    "stack file.",
    "at_window_edge": "The answer lies at the edge of its fit window. Widen the window in the stack file.",
    "not_converged": "The fit did not settle. Check the readings, or narrow the fit windows.",
    "shared_out_of_prior": "A shared quantity came out far from its stated value. Check the prism constants.",
    "interrupted": "The run was stopped before this site was fitted.",
    "guide_no_vertical_mode": "The layers through the guide hold no mode: the core is too thin, its index too low, "
    "or the polarisation is cut off. Check thickness and index of the core, and the wavelength.",
    "guide_no_lateral_mode": "The guide is too narrow, or etched too little, to hold this lateral mode. Check the "
    "drawn width, the width bias and the etch depth.",
    "guide_leaks_sideways": "The mode lies below a mode of the other polarisation in the layers beside the guide "
    "and loses light into them, the more so in bends. Etch deeper, or use the other polarisation.",
    "guide_leaks_down": "The substrate of high index lies so near that it takes light out of the mode and moves it; "
    "the number is for a substrate without that effect. A thicker buffer layer helps.",
    "guide_bend_radiates": "The bend loses light outwards, and its effective index is less exact. Use a larger radius, "
    "or a guide that confines more.",
    "guide_bend_out_of_range": "The bend is too tight for the model: no number is given. Use a larger radius.",
    "guide_near_cut_off": "The mode is so weakly bound that a small change of the guide loses it; its numbers depend "
    "strongly on every dimension. Use a wider or thicker guide.",
    "guide_outside_map": "The guide lies beyond the range that its correction was found for; the correction is carried "
    "on straight there, with an error larger than stated. Widen the windows in the stack file.",
    "guide_map_error": "The correction to the reference model stopped short of its goal; the stated uncertainty of the "
    "model says by how much. Narrow the windows in the stack file.",
    "guide_no_map": "Too few guides of the windows in the stack file hold this mode for a correction to the reference "
    "model, so no number is given. Narrow the windows, choose a guide that confines more, or ask for the plain method.",
    "guide_uniaxial": "The guide model knows isotropic layers only, and a layer of this stack has an index_normal: no "
    "number is given. Leave index_normal out to predict the guide.",
}

NOTES: dict[str, str] = {
    "reading_rejected": "A reading that fits no mode was left out.",
    "no_redundancy": "There are as many unknowns as readings: the fit cannot be checked by its residuals.",
    "not_parabolic": "An interval is not symmetric about its value; it was found from the likelihood itself.",
    "orders_found": "Mode numbers were missing and have been found from the readings.",
    "guide_sides_guide_nothing": "The layers beside the guide hold no mode, as with most guides that are etched "
    "through; the larger index of substrate and cover stands in for theirs.",
    "guide_second_mode": "The guide also holds a higher lateral mode of this polarisation; it may show in spectra.",
    "guide_plain_model": "Plain effective index method: its own error is not known, and in silicon wires may be 0.1, "
    "far more than dimensions vary. Good for a first look, not for a dimension.",
}


def flag(code: str, detail: str = "") -> Flag:
    """A flag or note with its registered sentence, and what is particular to this case after it."""
    text = FLAGS.get(code) or NOTES[code]
    return Flag(code, f"{text} {detail}".strip())
