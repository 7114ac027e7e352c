"""The shortlist as one self-contained page for a design review.

`data` says what a page holds, `shortlisted` takes it from a shortlist, `plots` draws, `render` writes.
"""
