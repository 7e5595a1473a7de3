"""Long trajectories from dispersed starts, compared with a density; Lyapunov exponents along them."""
