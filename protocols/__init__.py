"""Example protocols, coil files and the demo's invented lab: data only."""
