"""The napari plugin: a second door onto the same pipeline, with no science of its own."""
