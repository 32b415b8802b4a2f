"""The structure: size laws, target column, displacement, damage, fill, history, and the section assembled from them."""

from gravbasin.crater.cells import PARTS, Mesh, contrast, contrast_parts, default_mesh, shared_mesh
from gravbasin.crater.chart import EROSION_RATES, erosion_chart
from gravbasin.crater.dimensions import CraterDimensions, crater_dimensions
from gravbasin.crater.model import CraterModel, crater_model
from gravbasin.crater.priors import Range
from gravbasin.crater.rivals import KNOWN_RIVALS, Rival, rivals_of
from gravbasin.crater.samples import SampleUpdate, with_samples
from gravbasin.crater.section import UNITS, density_section, section_parts

__all__ = [
    "EROSION_RATES",
    "KNOWN_RIVALS",
    "PARTS",
    "UNITS",
    "CraterDimensions",
    "CraterModel",
    "Mesh",
    "Range",
    "Rival",
    "SampleUpdate",
    "contrast",
    "contrast_parts",
    "crater_dimensions",
    "crater_model",
    "default_mesh",
    "density_section",
    "erosion_chart",
    "rivals_of",
    "section_parts",
    "shared_mesh",
    "with_samples",
]
