"""What goes wrong while a visitor watches: real touches of the invented fibres, soon after the sending begins."""

from labmon.demo.faults import Touch

FIRST_AFTER_S = 90.0
EVERY_S = 40 * 60.0
LASTS_S = 180.0
BENCHES_IN_TURN = ("N4", "S4", "N4", "N2")
COUNT = 500


def live_excursions(start_s: float) -> list[Touch]:
    """Touches of 14° on the sphere that hold for three minutes: the first one on N4, 90 s after ``start_s``.

    14° takes N4 from 19 dB to about 12.5 dB (limit 15), S4 from 24 to about 17 dB (limit 20), N2 to about 18 dB
    (limit 20), each long enough for a limit with 60 s of delay.
    """
    return [Touch(subjects=(BENCHES_IN_TURN[number % len(BENCHES_IN_TURN)],), start_s=start_s + FIRST_AFTER_S + number * EVERY_S,
                  end_s=start_s + FIRST_AFTER_S + (number + 1) * EVERY_S, peak_deg=14.0, hold_s=LASTS_S, ring_down_s=10.0,
                  expected="touched, live")
            for number in range(COUNT)]
