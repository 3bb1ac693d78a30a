"""Campaigns of simulated rigs: how the detector would do on a laboratory's own frame.

``score`` runs one rig and holds what was concluded against the truth, ``table`` makes figures of many,
``best`` and ``core.limit`` say what could have been done at all. Simulated rigs only:
nothing here has seen a specimen.
"""
