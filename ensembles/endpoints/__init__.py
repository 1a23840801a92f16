"""Terminal and initial potentials of a bridge, carried through a linear-Gaussian transition in closed form."""
