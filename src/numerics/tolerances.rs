//! Every tolerance and iteration cap of the core, with the reason for its size.

/// Two successive trapezoid sums of a contour integral must agree to this, relative. Each halving of the step squares
/// the error, so the finer sum is then good to about the square: 10⁻¹².
pub const CONTOUR_AGREEMENT: f64 = 1e-6;
/// Contour points whose integrand is below this share of the peak add nothing in double precision.
pub const CONTOUR_NEGLIGIBLE: f64 = 1e-17;
/// Most points on half a contour before inversion gives up; the hardest case met in the tests needs about 9,000.
pub const CONTOUR_MAX_POINTS: usize = 1 << 17;
/// Newton steps to the saddle point; bisection alone needs about 50 for full precision.
pub const SADDLE_MAX_STEPS: usize = 80;
/// The saddle need only be near: this share of the integrand's own width.
pub const SADDLE_CLOSENESS: f64 = 1e-3;

/// Steps of bracketing root finders and minimisers: bisection halves a double's exponent range within about 1,100.
pub const BRACKET_MAX_STEPS: usize = 200;

/// Adaptive quadrature splits a panel until halves and whole agree to this share of the result.
pub const QUADRATURE_AGREEMENT: f64 = 1e-9;
/// Deepest splitting of one panel: 2⁻³⁰ of its length.
pub const QUADRATURE_MAX_DEPTH: usize = 30;

/// Largest change of ln N, of ln K and of any hazard × time over one panel of the time mesh. With 10 Gauss–Legendre
/// nodes a panel, the integrals of the totals are then good to about 10⁻¹³ (nearest pole of L/K one panel away).
pub const MESH_LOG_CHANGE: f64 = 0.7;
/// Most panels of the time mesh; more means rates per day far beyond any network's.
pub const MESH_MAX_PANELS: usize = 20_000;

/// Degree classes are left out of a tail sum once all nodes below could add at most this share of it.
pub const TAIL_NEGLIGIBLE: f64 = 1e-13;
/// A tail of this many expected nodes or fewer is zero for every purpose.
pub const TAIL_ZERO: f64 = 1e-18;
