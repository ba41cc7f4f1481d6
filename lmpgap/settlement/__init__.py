"""Money: positions, loss-component error, rights, the exhibit."""
