"""The pictures of a result, one file each: matplotlib figures made from the plain record.

They are drawn for one journal column (85 mm) in the colours of Okabe & Ito (2008), which readers
with any kind of colour vision can tell apart; what colour says is said by shape or word as well.
Nothing here imports pyplot or changes the user's settings: see :mod:`.canvas`.
"""
