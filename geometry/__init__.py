"""What the cell is made of: lattice, conductors, ports, mesh. Knows no field."""
