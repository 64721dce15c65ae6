"""Sweeps: one recording, or several, replayed under many settings, and questions that have one answer.

Stages, in order: `found` (what lies in the images, found once), `case` (what is replayed), `settings` (which there are,
and what each changes), `resample` (longer runs from short recordings), `points` (which are to be run), `kept` (what is
done already), `run` (the rest of them, on all cores or a cluster), then `tables` and `plots`, or `find` (the fastest
belt, the shortest look-ahead).
"""
