"""Files in and out: meshes, designs, materials, tables, images, parts; whole or not at all."""
