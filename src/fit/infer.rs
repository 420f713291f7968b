//! Puts a fit together: which rung the evidence reaches, the rates its totals give, and what to warn of.

use super::diagnostics::{flow_goodness, goodness, stationary_tail, warnings as diagnose};
use super::entry::entry_degrees;
use super::link_events::{LinkEventFit, fit_link_events};
use super::one_snapshot::fit_one_snapshot;
use super::profile::Profile;
use super::rates::Rates;
use super::stationary::StationaryLaw;
use super::successive::{Period, fit_successive, periods};
use super::transitions::{TransitionFit, fit_transitions};
use super::verdict::verdict;
use super::{Candidate, Fit, FitError, FitRequest, Force, Forces, Model, ModelChoice, Rung, TailPoint};
use crate::model::{AttachmentMix, EntryDegrees, Estimate, Evidence, Interval, Warning};

/// Infers the attachment mix, and where the evidence allows the other forces, from the evidence.
///
/// Departures, losses, entry degrees, dormancy, growth variance and the kernel exponent come from transitions (the exponent
/// also from link events), unless given. The mix comes from crossing flows when there are two snapshots or more, which on real
/// networks forecasts tails best, else from transitions, link events, or the one snapshot; a fixed mix is taken as given.
///
/// `cancelled` is asked before each evaluation of a flow likelihood and each fit of a period.
///
/// # Errors
/// [`FitError::NotIdentified`] when the evidence cannot tell what is asked, with what would.
pub fn fit(evidence: &Evidence, request: &FitRequest, cancelled: &dyn Fn() -> bool) -> Result<Fit, FitError> {
    let moves = match evidence.transitions() {
        [] => None,
        _ => Some(fit_transitions(evidence, &candidates_of(request), request.fixed, cancelled)?),
    };
    let events = evidence.link_events().map(|events| fit_link_events(events, cancelled)).transpose()?;
    let rung = rung(evidence, request)?;
    let chosen = choose(request, rung, moves.as_ref(), events.as_ref())?;
    let forces = chosen.forces;
    let (entry, mut warnings) = match moves.as_ref().and_then(|moves| moves.entry.clone()) {
        Some(entry) if evidence.entry().is_none() => (entry, Vec::new()),
        _ => entry_degrees(evidence, forces.has_losses())?,
    };
    let several = evidence.snapshots().len() > 1;
    let periods = match periods(
        evidence,
        &entry,
        &forces,
        request.links_per_node_day,
        moves.as_ref().map(|moves| &moves.summary),
    ) {
        Ok((periods, skipped)) => {
            warnings.extend(skipped);
            periods
        }
        // Only crossing flows need a period with growth.
        Err(_) if !several || rung != Rung::SuccessiveSnapshots => Vec::new(),
        Err(error) => return Err(error),
    };
    let rates = Rates::read(evidence, &entry, &periods, request, forces.has_losses())?;
    warnings.extend(rates.warnings.iter().cloned());
    let counts = &evidence.latest().counts;
    let choice = chosen.model.map_or(request.choice, ModelChoice::Only);
    let (mut profile, tail, goodness) = match rung {
        Rung::Given => (given(request.fixed.mix.unwrap_or(AttachmentMix::UNIFORM)), Vec::new(), None),
        Rung::SuccessiveSnapshots => {
            let fit = fit_successive(&periods, choice, cancelled)?;
            let tail = newest_tail(&periods, fit.profile.share.value, cancelled)?;
            let goodness = flow_goodness(&tail, counts.nodes(), fit.dispersion, fit.flow_error);
            (fit.profile, tail, Some(goodness))
        }
        Rung::OneSnapshot => {
            let past = past_links_per_arrival(evidence, &entry, &forces)?;
            let profile = fit_one_snapshot(counts, &entry, past, request)?;
            let mix = AttachmentMix::new(profile.share.value).unwrap_or(AttachmentMix::UNIFORM);
            let tail = stationary_tail(counts, &StationaryLaw::new(mix, past, entry.clone()));
            let goodness = goodness(&tail, counts.nodes(), request.seed);
            (profile, tail, Some(goodness))
        }
        Rung::Transitions | Rung::LinkEvents => {
            let share = chosen.share.unwrap_or(Force::given(0.0));
            let tail = newest_tail(&periods, share.value(), cancelled)?;
            (Profile { share: share.estimate, excursion: share.excursion, ..given(AttachmentMix::UNIFORM) }, tail, None)
        }
    };
    if let Some(model) = chosen.model {
        profile.model = model;
    }
    if let Some(candidates) = chosen.candidates {
        profile.candidates = candidates;
    }
    if let Some(goodness) = &goodness {
        warnings.extend(diagnose(counts, &tail, goodness, choice));
    }
    warnings.extend(moves.iter().flat_map(|moves| moves.warnings.iter().cloned()));
    warnings.extend(events.iter().flat_map(|events| events.warnings.iter().cloned()));
    warnings.extend(periods.last().and_then(|newest| shrinkage(newest, &forces)));
    if profile.share.value == 1.0 && entry.smallest() == 0 {
        let detail =
            "every landing end picks in proportion to links, so a newcomer that arrives without any never gains one";
        warnings.push(Warning::new("newcomers_never_gain", detail));
    }
    let linear = profile.model != Model::Power;
    let tail_exponent = tail_exponent(&profile, rates.exponent_links, entry.mean(), &forces).filter(|_| linear);
    let mut fit = Fit {
        model: profile.model,
        rung,
        preferential_share: profile.share,
        share_excursion: profile.excursion,
        links_per_arrival: rates.links_per_arrival,
        arrivals_per_day: rates.arrivals_per_day,
        rate_excursion: rates.excursion,
        forces,
        entry,
        tail_exponent,
        candidates: profile.candidates,
        goodness,
        tail,
        transitions: moves.map(|moves| moves.summary),
        attachment: events.map(|events| events.attachment),
        verdict: String::new(),
        warnings,
    };
    fit.verdict = verdict(&fit);
    Ok(fit)
}

/// The rung asked for, or the best that the evidence reaches.
fn rung(evidence: &Evidence, request: &FitRequest) -> Result<Rung, FitError> {
    if request.fixed.mix.is_some() {
        return Ok(Rung::Given);
    }
    let several = evidence.snapshots().len() > 1;
    let reached = |rung: Rung| match rung {
        Rung::Given => false,
        Rung::OneSnapshot => true,
        Rung::SuccessiveSnapshots => several,
        Rung::Transitions => !evidence.transitions().is_empty(),
        Rung::LinkEvents => evidence.link_events().is_some(),
    };
    match request.rung {
        Some(rung) if reached(rung) => Ok(rung),
        Some(rung) => {
            let missing = match rung {
                Rung::Given => "fixed.preferential_share",
                Rung::SuccessiveSnapshots => "a second snapshot",
                Rung::Transitions => "transitions",
                Rung::OneSnapshot | Rung::LinkEvents => "link_events",
            };
            Err(FitError::NotIdentified {
                detail: format!("the mix cannot be read from that evidence; give {missing}"),
            })
        }
        None => {
            let ladder = [Rung::SuccessiveSnapshots, Rung::Transitions, Rung::LinkEvents];
            Ok(ladder.into_iter().find(|&rung| reached(rung)).unwrap_or(Rung::OneSnapshot))
        }
    }
}

/// Candidates that transitions are asked about.
fn candidates_of(request: &FitRequest) -> Vec<Model> {
    match request.choice {
        ModelChoice::Auto => Model::ALL.to_vec(),
        ModelChoice::Only(model) => vec![model],
    }
}

/// What is settled before the mix: the candidate, its own parameter, and the losses.
struct Chosen {
    /// None when the rung's own likelihood is to choose.
    model: Option<Model>,
    forces: Forces,
    /// The preferential share that goes with it, on the rungs that fit all at once.
    share: Option<Force>,
    candidates: Option<Vec<Candidate>>,
}

fn choose(
    request: &FitRequest,
    rung: Rung,
    moves: Option<&TransitionFit>,
    events: Option<&LinkEventFit>,
) -> Result<Chosen, FitError> {
    let zero = Force::given(0.0);
    let given_or = |given: Option<f64>, found: Option<Force>| given.map(Force::given).or(found);
    let mut forces = Forces {
        departures: given_or(request.departures_per_node_day, moves.map(|m| m.departures)).unwrap_or(zero),
        link_losses: given_or(request.link_losses_per_link_day, moves.and_then(|m| m.link_losses)).unwrap_or(zero),
        kernel_exponent: Force::given(1.0),
        dormant_share: zero,
        growth_variance: zero,
    };
    // Likelihoods of different evidence do not compare: the candidates are those of the rung in use.
    let candidates = match rung {
        Rung::Transitions => moves.map(|moves| moves.summary.candidates.clone()),
        Rung::LinkEvents => events.map(|events| events.attachment.candidates.clone()),
        _ => None,
    };
    let fixed = request.fixed;
    let model = match request.choice {
        ModelChoice::Only(model) => Some(model),
        ModelChoice::Auto if fixed.kernel_exponent.is_some() => Some(Model::Power),
        ModelChoice::Auto if fixed.dormant_share.is_some() => Some(Model::Dormancy),
        ModelChoice::Auto if fixed.growth_variance.is_some() => Some(Model::GrowthVariance),
        ModelChoice::Auto if matches!(rung, Rung::Transitions | Rung::LinkEvents) => {
            let heaviest = candidates.iter().flatten().max_by(|a, b| a.weight.total_cmp(&b.weight));
            heaviest.map(|candidate| candidate.model)
        }
        ModelChoice::Auto => None,
    };
    let from_moves = model.and_then(|model| moves?.candidates.iter().find(|c| c.model == model));
    let own = from_moves.and_then(|candidate| candidate.own);
    let needed = |given: Option<f64>, found: Option<Force>, what: &str| {
        given_or(given, found).ok_or_else(|| FitError::NotIdentified {
            detail: format!("degree counts alone do not tell the {what}; give transitions, or fixed.{what}"),
        })
    };
    match model {
        Some(Model::Power) => {
            let found = own.or(events.map(|events| events.attachment.kernel_exponent));
            forces.kernel_exponent = needed(fixed.kernel_exponent, found, "kernel_exponent")?;
        }
        Some(Model::Dormancy) => forces.dormant_share = needed(fixed.dormant_share, own, "dormant_share")?,
        Some(Model::GrowthVariance) => forces.growth_variance = needed(fixed.growth_variance, own, "growth_variance")?,
        _ => {}
    }
    if rung == Rung::LinkEvents && matches!(model, Some(Model::Dormancy | Model::GrowthVariance)) {
        let detail = "link events tell the mix of nodes that differ in degree alone, not under dormancy or growth variance; \
                      read it from transitions or snapshots, or ask for another model";
        return Err(FitError::NotIdentified { detail: detail.into() });
    }
    let share = match rung {
        Rung::Transitions => from_moves.map(|candidate| candidate.preferential_share),
        Rung::LinkEvents => model.zip(events).map(|(model, events)| events.share(model)),
        _ => None,
    };
    Ok(Chosen { model, forces, share, candidates })
}

fn given(mix: AttachmentMix) -> Profile {
    let share = mix.preferential_share();
    let model = match share {
        0.0 => Model::Uniform,
        1.0 => Model::Preferential,
        _ => Model::Mix,
    };
    Profile { model, share: Estimate::given(share), excursion: (share, share), candidates: Vec::new() }
}

/// ℓ of a network that always grew in proportion: K/N − ē.
///
/// # Errors
/// When that is not positive, or nodes stand below the smallest entry degree, or losses make the law another one.
fn past_links_per_arrival(evidence: &Evidence, entry: &EntryDegrees, forces: &Forces) -> Result<f64, FitError> {
    let counts = &evidence.latest().counts;
    let refuse = |detail: String| Err(FitError::NotIdentified { detail });
    let remedy = "give fixed.preferential_share, or a second snapshot";
    if forces.has_losses() {
        return refuse(format!("one snapshot cannot tell the mix of a network that loses nodes or links; {remedy}"));
    }
    let own = [forces.kernel_exponent.value() - 1.0, forces.dormant_share.value(), forces.growth_variance.value()];
    if own.iter().any(|&value| value != 0.0) {
        return refuse(format!(
            "one snapshot is read by the stationary law of a plain mix, which a kernel exponent, dormancy or growth variance \
             change; {remedy}"
        ));
    }
    if counts.link_ends() == 0 {
        return refuse(format!("no node has a link, so the counts say nothing of how links attach; {remedy}"));
    }
    if counts.smallest() < entry.smallest() {
        return refuse(format!(
            "{} nodes have fewer links than any newcomer arrives with ({}); mend entry_degrees or the counts",
            counts.nodes() - counts.tail_size(entry.smallest()),
            entry.smallest()
        ));
    }
    let past = counts.mean_degree() - entry.mean();
    if past <= 0.0 {
        return refuse(format!(
            "the mean degree ({:.3}) is not above the mean entry degree ({:.3}), so no node has gained a link since it \
             arrived; mend entry_degrees, or {remedy}",
            counts.mean_degree(),
            entry.mean()
        ));
    }
    Ok(past)
}

fn newest_tail(periods: &[Period], share: f64, cancelled: &dyn Fn() -> bool) -> Result<Vec<TailPoint>, FitError> {
    let Some(newest) = periods.last() else { return Ok(Vec::new()) };
    let point = |(degree, observed, fitted)| TailPoint { degree, observed, fitted };
    Ok(newest.fitted_tail(share, cancelled)?.into_iter().map(point).collect())
}

/// A warning when tails shrank although nothing is said to leave or to be lost.
fn shrinkage(newest: &Period, forces: &Forces) -> Option<Warning> {
    let shrunken = newest.shrunken();
    let &(threshold, before, after) = shrunken.first()?;
    if forces.has_losses() {
        return None;
    }
    let detail = format!(
        "nodes with {threshold} links or more fell from {before} to {after} in the newest period ({} of the thresholds looked \
         at fell), so nodes leave or lose links; the forecast takes both as lasting, and its large hubs come out too many and \
         too certain; give departures_per_node_day or link_losses_per_link_day if you know them",
        shrunken.len()
    );
    Some(Warning::new("tails_shrank", detail))
}

/// Exponent 1 + (ℓ + ē)/(p·ℓ) that steady growth at these rates leads to; none for p = 0 or with losses.
fn tail_exponent(profile: &Profile, links: f64, entry_mean: f64, forces: &Forces) -> Option<Estimate> {
    let exponent = |share: f64| 1.0 + (links + entry_mean) / (share * links);
    if forces.has_losses() || profile.share.value <= 0.0 || links <= 0.0 {
        return None;
    }
    let interval = profile.share.interval.filter(|i| i.low > 0.0);
    let interval = interval.map(|i| Interval { level: i.level, low: exponent(i.high), high: exponent(i.low) });
    Some(Estimate { value: exponent(profile.share.value), interval })
}
