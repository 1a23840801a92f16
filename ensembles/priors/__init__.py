"""Prior dynamics: linear stochastic differential equations with exact transitions."""
