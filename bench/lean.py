"""Phases, episodes and closed-form start values of one capture, in a process of their own.

    python bench/lean.py CAPTURE

Nothing else is loaded: what this costs against ``import numpy`` is what the shortest useful
measurement costs a person who waits for it.
"""

from __future__ import annotations

import sys
from pathlib import Path

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from fit.difference import Order, form_difference
from fit.episodes import EpisodeRules, find_episodes
from fit.likelihood_start import start_candidates
from fit.thinning import thin_difference
from rig.channels import ChannelSetup, wire_channel
from rig.phases.estimate import track_pair
from rig.readers import open_capture

HOLD_S = 0.5


def main(path: str) -> str:
    """Return how many episodes and start values a capture gives."""
    capture = open_capture(path)
    reference, driven = (wire_channel(capture, ChannelSetup(channel=name)) for name in ("1", "2"))
    tracks = track_pair(reference, driven)
    difference = form_difference(tracks[1], tracks[0], Order(n=1, m=1, source="given"))
    episodes = find_episodes(difference, EpisodeRules(), HOLD_S)
    starts = start_candidates(thin_difference(difference))
    return f"{len(episodes)} episodes, {len(starts)} start values"


if __name__ == "__main__":
    print(main(sys.argv[1]))
