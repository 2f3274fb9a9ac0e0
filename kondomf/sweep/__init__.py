"""Which points, in which order, on which workers, stored how?"""
