"""The tolerance ladder: every tolerance a test may use, each with its reason.

A test takes a rung by name. A new rung needs a reason here; none is loosened to make a test pass.
Relative to the value unless "of scale" is said (`distill.query.scale_of`).
"""

EXACT = 0.0  # enumeration in rational arithmetic, or the same graph run twice
CLOSED_FORM = 1e-12  # float64 formula against enumeration or mpmath: a few hundred roundings
QUADRATURE = 1e-9  # of scale: fast quadrature against the oracle's adaptive one, which is asked for 1e-11
RELATIVE_TAIL = 1e-6  # relative, VOC down to 1e-30 of scale: what the labels promise
CHANCE_LABEL = 1e-6  # of scale: what a label through chance nodes may be off by before it says so
STANDARD_ERRORS = 4.0  # Monte Carlo at a fixed seed: a miss has odds of 6e-5 a check
UNSEEN_DRAWS = 10.0  # over the draws, of scale: an outcome so rare is in none of them with odds of 5e-5
PUBLISHED = 0.5  # units of the last place printed: what a rounded table can hold
ONNX_DOUBLE = 0.0  # a double graph with one thread repeats the estimator bit for bit
ONNX_FLOAT = 1e-5  # on a unit-scale target, where the graph computes in float32
FEATURE_TABLE = 2e-3  # of the largest sd: moments from a table of 12 cells, where a learner starts, no result
FEATURE_FIT = 0.06  # of the start value: the fit of f(-z) in the features, 5 % off at most
ROUGH_BATCH = (
    0.18  # a start at k = u^2 n / v, u = gap / sd, is short of the best rate by 17.6 % for u to 0 or infinity
)
ORACLE_GRID = (
    1e-7  # of scale: an oracle that tabulates distributions on a fixed grid, halving of which moves it less
)
CLOSED_FORM_RATE = 5e-3  # the runtime's fallback: best batch by a fit that costs 0.4 % of the rate at most
LOSS_FIT = 2e-7  # f(-z) of that fallback: a rational fit within 1.2e-7
BACKUP_MOMENTS = 0.03  # of scale: an agent's backup takes every node as normal, also a maximum under another
BACKUP_FIT = 5e-3  # of a share from 0 to 1: siblings' maximum taken as normal, 24 cells
BACKUP_COMPILED = 1e-9  # two libraries' exp and log: tails to x = -37 magnify roundings by x^2, levels add up
BETA_CDF = 5e-3  # of a beta distribution in the features: a normal form in float32, counts from 1/2 up
BETA_TABLE = 0.02  # of a support of size 1: 16 cells for narrow beliefs beside wide ones; a start, no result
ONNX_ELSEWHERE = 1e-4  # relative: another processor or WebAssembly rounds sums of float32 otherwise
FEATURE_ORDER = 1e-4  # of float32 features, relative and absolute: sums over leaves taken in another order
BETA_ORDER = 1e-3  # relative, of win/loss starts: the same, behind float32 betas; 1 table in 2,000 is beyond
START_TYPICAL = 0.05  # of a value: half of the starts of best candidates; a start, no result
START_MOST = 0.25  # of a value: nine in ten of them
START_FORGONE = 0.4  # share forgone by picks of the win/loss start; a random pick leaves 0.7
KINK_OF_NINE = 0.1  # of a value: nine Gauss-Hermite points miss a kink within half an sd by 9 % at most
KINK_OF_SIBLINGS = 0.25  # the same where the maximum of siblings, a kink by itself, is taken for a normal
SAMPLED_BEST = 0.05  # of a value: the largest of means over 300 samples is too high by one over their root
MILLS = 3e-15  # relative: what `numerics.mills` promises
GAIN_RATIO = 2e-15  # relative: what `numerics.gain_ratio` promises
ROUNDINGS = 1e-14  # some tens of roundings: logarithms of `numerics` near 0, sums of thirty terms
FINITE_DIFFERENCE = 1e-5  # relative: steps of 1e-3 sds leave their square times a third derivative
SAMPLED_LABEL = 4e-3  # of scale: four standard errors of a default run by sampling, as the method says
BETWEEN_NODES = 1e-3  # of sds, and of slopes: what the sampling method carries from outcomes to bins
LONG_WALK = 0.05  # of a limit above 1e-6: how near 200,000 trials come to it
BACKUP_START = 0.3  # of a start: a backup's maxima taken as normal, magnified where the gap is wide
FLOAT_COLUMNS = 1e-3  # of a score: columns given in float32, whose differences magnify the rounding
CALIBRATED_SHARE = 5e-3  # of 1: rows held by a bound that 30,000 others set, about four standard errors
CALIBRATED_PART = 6e-3  # the same of a part of them, 9,000 at the least: about two
DRAWN_SHARE = 0.06  # of 1: a share of 300 drawn nodes, three standard errors
DRIFTED_MEDIAN = 0.1  # decades, or of 1: a median over some hundreds of recorded leaves
