"""How a melt relaxes: kernels, mixing rule, Rouse part, moduli, spectrum, flow."""
