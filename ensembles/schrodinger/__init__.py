"""The static Schrödinger problem on arrays: weights and a kernel in, certified log-potentials out."""
