"""The module that measures each kind of phantom; nothing is imported until a step needs it."""

KIND_MODULES = {
    "point_source": "evenblur.phantoms.point_source",
    "uniform_cylinder": "evenblur.phantoms.uniform_cylinder",
}
