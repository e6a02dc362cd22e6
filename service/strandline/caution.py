"""The caution that the command line, the reports, the API's description and every document carry. Words only.

`tests/tidy/test_caution.py` holds the documents against it.
"""

CAUTION = (
    "Ordering delays data by the slack, up to hold_at_most, and longer in an incident (a paused or full sink, the "
    "service down); late events are not in the ordered output at all. No alarm path that protects people may depend on "
    "the ordered output alone: take such alarms from the raw feed, and follow local rules and the judgement of "
    "licensed people where the data guards life."
)
