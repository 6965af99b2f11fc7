"""Every tolerance the project compares with, named once, with its unit and the reason for its size."""

from __future__ import annotations

from typing import Final

# What counts as one and the same point in part space. A tenth of the last digit that is posted (1e-4 mm).
SAME_POINT_MM: Final = 1e-5

# Uncertainty claimed for a height measured by the virtual cut. The checks allow this much over a limit, no more.
MEASURE_MM: Final = 2e-4

# Share of the scallop limit that chords and straight joint moves may add to the scallop. Costs 1.5 % of cut length (length goes
# with 1/sqrt(h)); half of it would cost a third more blocks.
CHORD_SHARE_OF_SCALLOP: Final = 0.03

# A rotary axis whose axis direction is this near to the cutter axis (radians) cannot turn it: the pole.
POLE_RAD: Final = 1e-7

# The same for matched strips, which grow with the fourth root of the height: 5 % costs 1.3 % of cut length and halves the blocks.
CHORD_SHARE_OF_STRIP: Final = 0.05

# Two unit vectors are the same direction below this angle (radians); round-off of float64 cross products is 1e-16.
SAME_DIRECTION_RAD: Final = 1e-9

# A posted end point counts as inside an axis limit when it is over by no more than half the last posted digit.
LIMIT_MM: Final = 5e-5
LIMIT_DEG: Final = 5e-5

# Slack on a clearance measured between sampled bodies: half the spacing of the samples, squared over the radius.
CLEARANCE_MM: Final = 0.02

# Share of the whole by which an integral over the outline (area, length floor) may be off. Far below any printed digit.
QUADRATURE: Final = 1e-11

# Furthest that a curved outline may lie from the polygon that stands for it. Half the finest path tolerance in use, and a few
# hundred edges for an outline as big as a bench-top mill takes.
OUTLINE_CHORD_MM: Final = 0.001

# Largest turn of the cutter axis from one row of a cutter path to the next (radians, 2.5 degrees). Chords of the ball's centre
# do not feel the axis, but rotary axes move evenly between rows and the holder must stay where it was checked.
AXIS_TURN_RAD: Final = 0.0436

# Ends of lines in a drawing that meet within this are joined. Ten times the last digit that drawings usually carry (0.001 mm),
# and well below anything that could be meant.
OUTLINE_GAP_MM: Final = 0.01

# Residual of the exact cusp equations, as a share of the lengths in them (1e-12 of 100 mm: far below a millionth of a
# scallop). Above it the iteration has not settled.
CUSP_RESIDUAL: Final = 1e-12

# Share by which a stepover may miss the one asked for while the scallop that goes with it is iterated; one more step follows.
SAME_STEPOVER: Final = 1e-10

# A cutter axis counts as reached when the machine's own is this near (radians): 1e-4 mm at 100 mm, the last posted digit.
REACH_RAD: Final = 1e-6

# Share of the stepover by which chords may shift a pass sideways. The cusp then changes by at most four times this share.
SIDEWAYS_SHARE_OF_STEP: Final = 5e-4

# How far a bound may stand above the highest residual that was measured before the search between nodes stops there. A quarter
# of the uncertainty claimed for a height.
BOUND_SLACK_MM: Final = 5e-5

# The virtual cut looks no higher than this over the wanted surface: what stands higher was not finished. A hundred times a
# usual scallop limit; more only lengthens the lists of moves that come near.
UNCUT_MM: Final = 0.5

# Corners of neighbouring triangles within this are one vertex of a mesh. Round-off of clipping at 100 mm is 1e-13.
WELD_MM: Final = 1e-7

# Read-back motion is split into pieces until the tip is nearer than this to a straight line within each. A quarter of the
# uncertainty claimed for a measured height, and most of it lies along the surface, where a height does not feel it.
PIECE_MM: Final = 5e-5

# Largest turn of all rotary axes together within one piece of read-back motion (radians, 0.5 degrees): between rows a holder is
# taken to go straight, and 0.5 degrees bend the path of a point 100 mm away by 1 micrometre.
PIECE_TURN_RAD: Final = 0.0087266463

# Arcs that were read are walked in chords that stay this near to them: half of what a measured height may be off.
ARC_CHORD_MM: Final = 1e-4

# How far an axis may be asked beyond its fastest feed: rounding of the end points of short moves.
FEED_SHARE: Final = 1e-3

# Smallest distance that straight joint moves may be asked to keep to the intended path: a third of the last posted digit of a
# length (1e-4 mm), below which more blocks only add more rounding.
LINEAR_FLOOR_MM: Final = 3e-5

# How far the cutter axis may turn off its wish between rows (radians, 0.05 degrees). A ball does not feel it, for its centre is
# held; a holder 100 mm up moves by 0.09 mm. Cutters with a flat bottom get less, by their radius.
AXIS_STRAY_RAD: Final = 0.000872664625997

# Most blocks that the move between two rows of a cutter path is split into; beyond it the path runs through the pole far off
# the rotary axis, and planning stops rather than lose accuracy.
SUBDIVISION_CAP: Final = 20000

# How far a control in G64 is taken to cut a corner (mm), and a rotary axis to stay short of its word (degrees: the same 57 mm
# from the axis). NISTIR 6556 gives G64 no tolerance word; half a hundredth is a usual setting for finishing (common practice).
CORNER_MM: Final = 0.005
CORNER_DEG: Final = 0.005

# Exact path (G61) stops at a corner sharper than this (radians, 0.1 degrees); less is one smooth line in posted digits.
EXACT_PATH_RAD: Final = 0.00175

# Arcs are timed in straight pieces of at most this turn (radians, 3 degrees): each axis's share is then off by 3 % at most.
ARC_PIECE_RAD: Final = 0.05236

# Share of the acceleration that the time model leaves unused on curves: what its windows and short straight pieces blunt, so
# that no estimate is below the time-optimal one. Costs half of that share in time.
CURVE_RESERVE: Final = 0.004

# A motion that takes no more than this share longer than its feed asks for is not called held back.
HELD_BACK_SHARE: Final = 0.01

# How far pieces of read-back motion may be joined into one for the stock field: a hundredth of its usual grid spacing at the
# cutting end, and at a point 60 mm up the axis what a clearance is told to.
STOCK_CHORD_MM: Final = 0.003
STOCK_REACH_MM: Final = 0.02

# Share of the stepover by which straight joint moves may shift a pass sideways. A cusp rises by at most four times this share.
LINEAR_SIDEWAYS_SHARE: Final = 1e-3

# The best feed direction is found to this (radians, 0.03 degrees): length goes with the square of the miss, so it is
# shortest to within a millionth, and job files have tenths of a degree.
SAME_FEED_DIRECTION_RAD: Final = 5e-4

# Error of a stopwatch reading (s, standard deviation): two presses and the doubt when a program begins and ends (common
# practice).
STOPWATCH_S: Final = 0.5

# Share of a reading by which the time model itself may miss a machine that it fits (standard deviation): what corner
# distances, filters and servo lag of other controls make of the same blocks, beyond acceleration, jerk and block rate.
READING_SHARE: Final = 0.003

# Logarithm of a fitted scale is settled below this: a tenth of a percent, far below what stopwatches tell.
CALIBRATION_STEP: Final = 1e-3
