"""The unit Gaussian kernel k_ij = exp(-½|u_i - v_j|²) in several forms behind one contract."""
