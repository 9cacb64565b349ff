"""The napari plugin: the only room that knows napari and Qt. One state a viewer, docks that show it."""
