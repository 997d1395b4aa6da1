"""Band signals -> tones, one-third-octave levels, noise floor, blind intervals."""
