"""Which few-parameter model describes the low energies?"""
