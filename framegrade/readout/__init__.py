"""Measure a camera: the readout time of a mode, and the field of view, from clips filmed for it or from flights.

Each way is one module: `swing` (the camera swung by hand), `flicker` (a lamp of known flicker frequency), `vibration`
(tones of a flight) and `field_of_view` (a full turn in place). `command` is `framegrade readout`.
"""
