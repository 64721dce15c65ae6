"""From images to part poses in the cell frame, in the order of the flow:

recording -> lens -> plane -> model (teach) -> find, match -> locate.
Pixels stop at this package's border: what leaves it is millimetres and radians in the cell frame.
"""
