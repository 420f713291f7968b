//! Every tolerance and iteration cap of the core, with the reason for its size.

/// Two successive trapezoid sums of a contour integral must agree to this, relative. Each halving of the step squares
/// the error, so the finer sum is then good to about the square: 10⁻¹².
pub const CONTOUR_AGREEMENT: f64 = 1e-6;
/// How exact a tail must be.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Accuracy {
    /// As the stated accuracy of the forecast: 10⁻⁸ relative and better.
    Full,
    /// About 10⁻⁵ relative, for what only steers a fit or measures an uncertainty.
    Working,
}

impl Accuracy {
    /// Degree classes are left out of a tail sum once all nodes below could add at most this share of it.
    pub fn negligible(self) -> f64 {
        match self {
            Self::Full => 1e-13,
            Self::Working => 1e-6,
        }
    }

    /// Adaptive quadrature splits a panel until halves and whole agree to this share of the result.
    pub fn quadrature(self) -> f64 {
        match self {
            Self::Full => 1e-9,
            Self::Working => 1e-5,
        }
    }

    /// First step of a contour sum over the width of its integrand. Its error is about e^{−2π/step}: 10⁻⁷ before the
    /// halving that a full sum does, 5·10⁻⁶ for a working one, which is taken as it is.
    pub fn contour_step(self) -> f64 {
        match self {
            Self::Full => 0.4,
            Self::Working => 0.5,
        }
    }
}

/// Contour points whose integrand is below this share of the peak add nothing in double precision.
pub const CONTOUR_NEGLIGIBLE: f64 = 1e-17;
/// Most points on half a contour before inversion gives up; the 721 cases of the reference tables need at most 822.
pub const CONTOUR_MAX_POINTS: usize = 1 << 13;
/// Newton steps to the saddle point; bisection alone needs about 50 for full precision.
pub const SADDLE_MAX_STEPS: usize = 80;
/// The saddle need only be near: this share of the integrand's own width.
pub const SADDLE_CLOSENESS: f64 = 1e-3;

/// Steps of bracketing root finders and minimisers: bisection halves a double's exponent range within about 1,100.
pub const BRACKET_MAX_STEPS: usize = 200;

/// Deepest splitting of one panel: 2⁻³⁰ of its length.
pub const QUADRATURE_MAX_DEPTH: usize = 30;
/// Most splits of one integral: a smooth integrand with one sharp edge takes about 30; more means noise that no splitting mends.
pub const QUADRATURE_MAX_PANELS: usize = 1_000;

/// Largest change of ln N and of ln K over one panel of the time mesh. With 10 Gauss–Legendre
/// nodes a panel, the integrals of the totals are then good to about 10⁻¹³ (nearest pole of L/K one panel away).
pub const MESH_LOG_CHANGE: f64 = 0.7;
/// Largest hazard × time over one panel: 10 Gauss–Legendre nodes integrate e^{3x} over it to about 10⁻¹⁴.
pub const MESH_HAZARD: f64 = 3.0;
/// Most panels of the time mesh; more means rates per day far beyond any network's.
pub const MESH_MAX_PANELS: usize = 600;

/// A tail of this many expected nodes or fewer is zero for every purpose.
pub const TAIL_ZERO: f64 = 1e-18;

/// Relative and absolute tolerance of the growth equations that have no closed form, a step.
pub const ODE_TOLERANCE: f64 = 1e-11;

/// Steps of likelihood scoring; from the starts used, 5 to 20 are enough.
pub const SCORING_MAX_STEPS: usize = 100;
/// A step that raises a log-likelihood by less than this is the last: estimates are then within a thousandth of their
/// standard errors of the maximum.
pub const SCORING_GAIN: f64 = 1e-6;

/// Probabilities of a count below this add nothing to its ranked probability score.
pub const SCORE_NEGLIGIBLE: f64 = 1e-18;
/// Most terms on either side of a ranked probability score's sum: 40 times the spread of the most skewed law that is summed.
pub const SCORE_MAX_TERMS: usize = 10_000;
/// Step in the logarithm of a trapezoid sum for Gini's mean difference: its error is about e^{−π²/step}, 10⁻¹⁷.
pub const GINI_STEP: f64 = 0.25;

/// The share of links that a degree cap refuses is settled once a round moves it by less than this.
pub const CAP_AGREEMENT: f64 = 1e-6;
/// Rounds to settle it; each brings about a digit, and a cap that refuses nearly all needs about 30.
pub const CAP_MAX_ROUNDS: usize = 60;

/// Points of the lattice that a normal vector's probability is averaged over: absolute errors of about 10⁻⁴ in four
/// dimensions and 2·10⁻³ in 64; with 2,000 points they were up to 4·10⁻³.
pub const ORTHANT_POINTS: usize = 10_000;
/// Most coordinates of such a vector.
pub const ORTHANT_MAX_DIMENSION: usize = 128;
/// A share of variance below this is none: what rounding leaves of a coordinate that others determine.
pub const ORTHANT_PIVOT: f64 = 1e-12;

/// How often a refused link end picks again before the nodes below the cap are listed: a listing costs about as much.
pub const CAP_MAX_PICKS: usize = 1_000;

/// Cells of a first-passage equation at first, and at most: cost goes with the square.
pub const PASSAGE_FIRST_CELLS: usize = 8;
/// See [`PASSAGE_FIRST_CELLS`].
pub const PASSAGE_MAX_CELLS: usize = 128;
/// Halving the cells must change a first-passage probability by no more than this; the finer answer is then better by about
/// a factor of three.
pub const PASSAGE_AGREEMENT: f64 = 1e-3;
