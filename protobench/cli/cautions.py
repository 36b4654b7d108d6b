"""What must be read before hardware may move."""

CAUTIONS = """\
CAUTION: the module on this link may be real and may move.
- Modules may jump, pinch, fall or shed parts; lithium cells may vent. Keep people, hands and faces clear.
- Someone stands by during the whole run, with a power cut at hand that does not depend on this software.
- A halt message, over a radio above all, is not an emergency stop in the sense of ISO 13850.
- Local law, the site's rules and qualified people decide (ISO 12100, ISO 10218, ISO 13849, IEC 60204-1).
"""
