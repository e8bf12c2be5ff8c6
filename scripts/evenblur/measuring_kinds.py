"""The module that measures each kind of phantom; nothing is imported until a step needs it."""

KIND_MODULES = {
    "hot_spheres": "evenblur.phantoms.hot_spheres",
    "line_source": "evenblur.phantoms.line_source",
    "point_source": "evenblur.phantoms.point_source",
    "reference_image": "evenblur.phantoms.reference_image",
    "uniform_cylinder": "evenblur.phantoms.uniform_cylinder",
}
