"""The cautions that go with every result, word for word the same wherever they stand."""

CAUTIONS = (
    "Uplift rates are relative to base level, interpolated between map nodes and ages, and assume that the drainage"
    " and the erodibility stayed as they are. They contain the isostatic response to erosion and know no sideways"
    " motion of rock. Heights alone do not give the erodibility: it was stated, and it sets the clock.",
    "Not a seismic-hazard assessment, and not a basis for siting or designing dams, tunnels, waste stores or"
    " buildings: local codes and licensed practice decide there.",
)
