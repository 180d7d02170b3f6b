"""Plan view: from the unit cell to the whole cell with fingers, busbars and wires."""
