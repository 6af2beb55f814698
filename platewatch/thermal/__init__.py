"""The plate as physics: materials, grid, losses, conduction, reduction."""
