"""Files in and out: meshes, designs, materials, tables, images, parts; written whole or not at all."""
