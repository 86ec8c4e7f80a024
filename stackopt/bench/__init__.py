"""The bench: materials fitted to measured sweeps, setups calibrated, prototypes compared with their prediction."""
