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
}

NOTES: dict[str, str] = {
    "reading_rejected": "A reading that fits no mode was left out.",
    "no_redundancy": "There are as many unknowns as readings: the fit cannot be checked by its residuals.",
    "not_parabolic": "An interval is not symmetric about its value; it was found from the likelihood itself.",
    "orders_found": "Mode numbers were missing and have been found from the readings.",
}


def flag(code: str, detail: str = "") -> Flag:
    """A flag or note with its registered sentence, and what is particular to this case after it."""
    text = FLAGS.get(code) or NOTES[code]
    return Flag(code, f"{text} {detail}".strip())
