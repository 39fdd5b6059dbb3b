"""How line photons leave."""
