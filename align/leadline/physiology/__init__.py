"""Turns recordings into depth profiles: spectra, current sources, coherence, evoked responses and units by row."""

from leadline.physiology.profile import profile_of as profile_of
