//! Gauss–Legendre quadrature on panels, and adaptive integration by halving.

use std::num::NonZeroUsize;
use std::sync::LazyLock;

use gauss_quad::GaussLegendre;

use super::tolerances::{Accuracy, QUADRATURE_MAX_DEPTH, QUADRATURE_MAX_PANELS};

/// Nodes of one panel.
pub const PANEL_NODES: usize = 10;

/// The Gauss–Legendre rule on [0, 1], with the matrix that integrates from each node to the right end.
pub struct PanelRule {
    /// Nodes, ascending, in (0, 1).
    pub nodes: [f64; PANEL_NODES],
    /// Weights, adding up to one.
    pub weights: [f64; PANEL_NODES],
    /// `to_right[i][j]`: weight of the integrand's value at node j in its integral from node i to 1; exact for
    /// polynomials of degree below the number of nodes.
    pub to_right: [[f64; PANEL_NODES]; PANEL_NODES],
}

/// The rule, made once.
pub static PANEL: LazyLock<PanelRule> = LazyLock::new(PanelRule::new);

impl PanelRule {
    fn new() -> Self {
        const DEGREE: NonZeroUsize = NonZeroUsize::new(PANEL_NODES).unwrap();
        let mut pairs: Vec<(f64, f64)> = GaussLegendre::new(DEGREE)
            .into_node_weight_pairs()
            .into_vec()
            .into_iter()
            .map(|(node, weight)| (0.5 * (1.0 + node), 0.5 * weight))
            .collect();
        pairs.sort_by(|a, b| a.0.total_cmp(&b.0));
        let mut nodes = [0.0; PANEL_NODES];
        let mut weights = [0.0; PANEL_NODES];
        for (i, (node, weight)) in pairs.into_iter().enumerate() {
            (nodes[i], weights[i]) = (node, weight);
        }
        let mut to_right = [[0.0; PANEL_NODES]; PANEL_NODES];
        for (from, row) in nodes.iter().zip(&mut to_right) {
            let length = 1.0 - from;
            for (j, entry) in row.iter_mut().enumerate() {
                // A Lagrange basis polynomial has degree n − 1, which the rule itself integrates exactly.
                *entry =
                    (0..PANEL_NODES).map(|q| weights[q] * length * lagrange(&nodes, j, from + length * nodes[q])).sum();
            }
        }
        Self { nodes, weights, to_right }
    }

    /// Integrates `f` over [a, b] with one panel.
    pub fn integrate(&self, a: f64, b: f64, mut f: impl FnMut(f64) -> f64) -> f64 {
        let length = b - a;
        self.nodes.iter().zip(&self.weights).map(|(&x, &w)| w * length * f(a + length * x)).sum()
    }
}

fn lagrange(nodes: &[f64], j: usize, x: f64) -> f64 {
    nodes.iter().enumerate().filter(|&(i, _)| i != j).map(|(_, &node)| (x - node) / (nodes[j] - node)).product()
}

/// Integrates `f` ≥ 0 over [a, b], halving panels until halves and whole agree.
///
/// Formula: Gauss–Legendre with 10 nodes on each panel. A panel is accepted when its two halves add up to it within
/// `accuracy` of `scale` plus the integral so far, or at the caps: 2⁻³⁰ of [a, b], or 1,000
/// splits.
///
/// # Numerical notes
/// `scale` is a lower bound of the quantity that the integral is added to (0 when it stands alone); it spares the work
/// on an integral that hardly matters.
///
/// ```
/// use tailcast::numerics::{quadrature::integrate_adaptively, tolerances::Accuracy};
/// let area = integrate_adaptively(0.0, 1.0, 0.0, Accuracy::Full, &mut |x: f64| Ok::<_, ()>((-200.0 * x).exp())).unwrap();
/// assert!((area * 200.0 - 1.0).abs() < 1e-8);
/// ```
///
/// # Errors
/// The first error of `f`.
pub fn integrate_adaptively<E>(
    a: f64,
    b: f64,
    scale: f64,
    accuracy: Accuracy,
    f: &mut impl FnMut(f64) -> Result<f64, E>,
) -> Result<f64, E> {
    let whole = panel(a, b, f)?;
    let mut pending = vec![(a, b, whole, 0)];
    let (mut total, mut split) = (0.0, 0);
    while let Some((a, b, whole, depth)) = pending.pop() {
        let middle = 0.5 * (a + b);
        let (left, right) = (panel(a, middle, f)?, panel(middle, b, f)?);
        let error = (left + right - whole).abs();
        if error <= accuracy.quadrature() * (scale + total + left + right)
            || depth >= QUADRATURE_MAX_DEPTH
            || split >= QUADRATURE_MAX_PANELS
        {
            total += left + right;
        } else {
            split += 1;
            pending.push((middle, b, right, depth + 1));
            pending.push((a, middle, left, depth + 1));
        }
    }
    Ok(total)
}

fn panel<E>(a: f64, b: f64, f: &mut impl FnMut(f64) -> Result<f64, E>) -> Result<f64, E> {
    let length = b - a;
    let mut sum = 0.0;
    for (&x, &w) in PANEL.nodes.iter().zip(&PANEL.weights) {
        sum += w * length * f(a + length * x)?;
    }
    Ok(sum)
}
