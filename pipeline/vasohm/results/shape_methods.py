"""What the methods paragraph says of shape, with the sources of the measures that a study gives."""

from collections.abc import Callable, Iterator

from vasohm.network.calibre_equivalents import KNUDTSON, LEAST_VESSELS, MOST_VESSELS
from vasohm.network.class_trees import TreeSettings
from vasohm.network.morphometry import ShapeSettings

HART = (
    "Hart WE, Goldbaum M, Cote B, Kube P, Nelson MR. Measurement and classification of retinal vascular tortuosity. "
    "Int J Med Inform 1999;53:239-252."
)
BULLITT = (
    "Bullitt E, Gerig G, Pizer SM, Lin W, Aylward SR. Measuring tortuosity of the intracerebral vasculature from MRA "
    "images. IEEE Trans Med Imaging 2003;22:1163-1171. doi:10.1109/TMI.2003.816964"
)
MURRAY_LAW = (
    "Murray CD. The physiological principle of minimum work: I. The vascular system and the cost of blood volume. Proc "
    "Natl Acad Sci USA 1926;12:207-214. doi:10.1073/pnas.12.3.207"
)
MURRAY_ANGLES = (
    "Murray CD. The physiological principle of minimum work applied to the angle of branching of arteries. J Gen "
    "Physiol 1926;9:835-841. doi:10.1085/jgp.9.6.835"
)
ZAMIR = "Zamir M. Optimality principles in arterial branching. J Theor Biol 1976;62:227-251."
STRAHLER = (
    "Strahler AN. Quantitative analysis of watershed geomorphology. Trans Am Geophys Union 1957;38:913-920. "
    "doi:10.1029/TR038i006p00913"
)
HORTON = "Horton RE. Erosional development of streams and their drainage basins. Geol Soc Am Bull 1945;56:275-370."
DIAMETER_ORDERS = (
    "Jiang ZL, Kassab GS, Fung YC. Diameter-defined Strahler system and connectivity matrix of the pulmonary arterial "
    "tree. J Appl Physiol 1994;76:882-892. doi:10.1152/jappl.1994.76.2.882"
)
DENSITIES = (
    "Chu Z, et al. Quantitative assessment of the retinal microvasculature using optical coherence tomography "
    "angiography. J Biomed Opt 2016;21:066008. doi:10.1117/1.JBO.21.6.066008"
)
DISTANCES = (
    "Baddeley AJ, Gill RD. Kaplan-Meier estimators of distance distributions for spatial point processes. Ann Stat "
    "1997;25:263-292."
)
BOXES = "Falconer K. Fractal Geometry: Mathematical Foundations and Applications. 3rd ed. Wiley, 2014, ch. 2."
LACUNARITY = (
    "Allain C, Cloitre M. Characterizing the lacunarity of random and deterministic fractal sets. Phys Rev A "
    "1991;44:3552-3558. doi:10.1103/PhysRevA.44.3552"
)
KNUDTSON_FORMULA = (
    "Knudtson MD, Lee KE, Hubbard LD, Wong TY, Klein R, Klein BEK. Revised formulas for summarizing retinal vessel "
    "diameters. Curr Eye Res 2003;27:143-149. doi:10.1076/ceyr.27.3.143.16049"
)
PARR = (
    "Parr JC, Spears GFS. General caliber of the retinal arteries expressed as the equivalent width of the central "
    "retinal artery. Am J Ophthalmol 1974;77:472-477."
)
HUBBARD = (
    "Hubbard LD, et al. Methods for evaluation of retinal microvascular abnormalities associated with "
    "hypertension/sclerosis in the Atherosclerosis Risk in Communities Study. Ophthalmology 1999;106:2269-2280. "
    "doi:10.1016/S0161-6420(99)90525-0"
)


def shape_sentences(
    shape: ShapeSettings, trees: TreeSettings, mark: Callable[[str], str], *, with_disc: bool
) -> Iterator[str]:
    """Say how shape was measured; calibre equivalents only where an optic disc may be known."""
    if trees.by_class:
        yield (
            "Where an arteriole and a venule meet in the picture their trees were parted; vessels of no class went "
            "with the tree they hang on."
        )
    yield (
        f"Tortuosity and curvature follow {mark(HART)}, inflections {mark(BULLITT)}. Branchings were held against "
        f"Murray's law {mark(MURRAY_LAW)} and the optimal angles of {mark(MURRAY_ANGLES)} and {mark(ZAMIR)}. Vessels "
        f"of trees were ordered by Strahler {mark(STRAHLER)}, with Horton's ratios {mark(HORTON)}, and by diameter "
        f"{mark(DIAMETER_ORDERS)}. Densities and diameter index follow {mark(DENSITIES)}, distances from tissue to "
        f"vessels {mark(DISTANCES)}, the box-counting dimension {mark(BOXES)} and lacunarity {mark(LACUNARITY)}."
    )
    if not with_disc:
        return
    low, high = shape.zone_dd
    formula = shape.calibre_formula
    sources = mark(KNUDTSON_FORMULA) if formula == KNUDTSON else f"{mark(PARR)} and {mark(HUBBARD)}"
    most = MOST_VESSELS[formula]
    which = f"the {most} widest" if most else f"all, at least {LEAST_VESSELS[formula]},"
    yield (
        f"Calibre equivalents were taken from {which} arterioles and venules that cross the zone from {low:g} to "
        f"{high:g} disc diameters off the optic disc's margin, by {sources}."
    )
