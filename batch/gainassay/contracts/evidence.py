"""What a part's number rests on."""

EVIDENCE = ("guaranteed", "typical", "assumed", "missing")
"""The strongest first; a number's evidence is stored as its place here.

`guaranteed`: a min or max limit; `typical`: a typical figure; `assumed`: the job's stand-in; `missing`: nothing is
known, and the departure is left out of the account.
"""

GUARANTEED, TYPICAL, ASSUMED, MISSING = range(4)
