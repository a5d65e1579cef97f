"""The spec that filters the invented recording, as it is written beside it."""

RESULT = "gravel_band"
PASS_HZ = (35, 200)

SPEC_TEXT = """\
# What is done to the invented recording beside this file. Two notches take out the mains hum and
# its third harmonic; one band filter keeps what gravel sounds like, and takes out the pump, the
# river's rumble and the hum's fifth harmonic with the rest.
spec_version: 1
title: Gravel on the weir plate, without hum and pump

signals:
  plate:
    variable: velocity
    sample_rate: 1 kHz                  # the source must agree
    unit: mm/s                          # here too
    breaks: split                       # a jump of the clock ends a stretch; nothing crosses it
    missing: {bridge: 5 samples}        # shorter dropouts are filled on the straight line,
                                        # longer ones make the results around them missing

filters:
  hum:
    method: notch
    centre: 50 Hz
    width: 4 Hz                         # between the half-power points
    settle: 0.02                        # how near a dropout results count, see the picture
  hum_third:
    method: notch
    centre: 150 Hz
    width: 4 Hz
    settle: 0.02
  gravel:
    method: kaiser
    bands:                              # between bands nothing is asked
      - {to: 20 Hz, gain: 0, tolerance: -60 dB}
      - {from: 35 Hz, to: 200 Hz, gain: 1, tolerance: 0.1 dB}
      - {from: 240 Hz, gain: 0, tolerance: -60 dB}

results:
  gravel_band:
    from: plate
    through: [hum, hum_third, gravel]   # in this order
    timing: zero-phase                  # impacts stay at their sample
    ends: blank                         # near the ends and the jump no result is given: what
                                        # the filter makes up there could pass for an impact
    keep_as: float32
"""
