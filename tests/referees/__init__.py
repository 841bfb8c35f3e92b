"""Independent forward solvers: they share no code and no method with the package.

`beams` and `second_order` are finite elements of high degree, `digits` propagates the state of a
stepped member with 50 and more digits. None of them imports the package.
"""
