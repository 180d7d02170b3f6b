"""What a person describes: base, surfaces, layers, contacts, patches, light, unit cell. Plain validated data."""
