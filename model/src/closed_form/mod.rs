//! Line source, leaky, images, storage and skin: for checks and for sites too simple for a mesh.
