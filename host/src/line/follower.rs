//! Piecewise-constant signals behind two first-order lags, exact in continuous time.
//!
//! A data edge or an inverter edge is a step that goes through its own first-order edge (time
//! constant `t1`) and then through the monitor's RC pole (`t2`). With both residuals measured from
//! the level `u` in force, a stretch `d` without a step advances them by
//!
//! ```text
//! edge(t+d)   = edge e1                    e1 = exp(-d/t1)
//! filter(t+d) = filter e2 + edge c         e2 = exp(-d/t2), c = t1/(t1-t2) (e1-e2)
//! ```
//!
//! Steps fall anywhere between samples; a leg that is sampled later simply has its own sampling
//! instants, so the skew of a converter is exact too. When both residuals have died away the level is
//! copied, which is what makes long runs cheap.

use super::{BLOCK, Wave};

/// A step to another state.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(crate) struct Event {
    /// When, in samples from the start.
    pub at: f64,
    /// The state in force from then on.
    pub state: u32,
}

/// Residuals below this are zero: volts, a hundredth of a microvolt.
const SETTLED: f64 = 1e-8;
/// Shortest time constant, samples.
pub(crate) const SHORTEST: f64 = 1e-4;

/// Factors that advance residuals over one stretch.
#[derive(Clone, Copy, Debug)]
struct Advance {
    edge: f64,
    filter: f64,
    cross: f64,
}

impl Advance {
    fn over(samples: f64, edge_tau: f64, filter_tau: f64) -> Self {
        let edge = (-samples / edge_tau).exp();
        let filter = (-samples / filter_tau).exp();
        Self { edge, filter, cross: edge_tau / (edge_tau - filter_tau) * (edge - filter) }
    }
}

#[derive(Clone, Copy, Debug, Default)]
struct Lagging {
    target: f64,
    edge: f64,
    filter: f64,
}

/// One leg following a sequence of states. All its channels step together.
#[derive(Clone, Debug)]
pub(crate) struct Follower {
    /// State, then channel.
    levels: Vec<Vec<f64>>,
    /// Time constant of the edge towards each state, samples.
    edges: Vec<Option<f64>>,
    edge_tau: f64,
    filter_tau: f64,
    /// Sampling delay of this leg, samples.
    delay: f64,
    channels: Vec<Lagging>,
    is_settled: bool,
    /// Instant of the residuals, in samples from the start of the block, on this leg's clock.
    position: f64,
    whole: Advance,
}

impl Follower {
    /// A follower at rest in state 0. `levels` is indexed by state, then channel; `edges` holds the
    /// time constant of the edge towards each state in samples (`None` keeps the one before).
    pub fn new(levels: Vec<Vec<f64>>, edges: Vec<Option<f64>>, filter_tau: f64, delay: f64) -> Self {
        let filter_tau = filter_tau.max(SHORTEST);
        let edges: Vec<Option<f64>> =
            edges.into_iter().map(|tau| tau.map(|tau| apart(tau, filter_tau))).collect();
        let edge_tau = edges.iter().flatten().copied().next().unwrap_or(2.0 * SHORTEST + filter_tau);
        let channels = levels.first().map_or_else(Vec::new, |rest| {
            rest.iter().map(|&target| Lagging { target, ..Lagging::default() }).collect()
        });
        let whole = Advance::over(1.0, edge_tau, filter_tau);
        Self { levels, edges, edge_tau, filter_tau, delay, channels, is_settled: true, position: -1.0, whole }
    }

    /// Fills one block per channel. `first` is the block's first sample; `events` are in order, and
    /// `read` moves past those used up. With `jitter` (samples), each sample is moved along the slope.
    pub fn fill(
        &mut self,
        first: f64,
        events: &[Event],
        read: &mut usize,
        jitter: Option<&Wave>,
        outputs: &mut [Wave],
    ) {
        let mut sample = 0;
        while sample < BLOCK {
            let event = events.get(*read).map(|event| (event.at - first - self.delay, event.state));
            let until = match event {
                Some((at, _)) if at <= (BLOCK - 1) as f64 => (at.ceil().max(0.0) as usize).max(sample),
                _ => BLOCK,
            };
            self.run(sample, until, jitter, outputs);
            sample = until;
            if let (Some((at, state)), true) = (event, until < BLOCK) {
                self.step(at, state);
                *read += 1;
            }
        }
        self.position -= BLOCK as f64;
    }

    /// Samples `from..until`, with no step in between.
    fn run(&mut self, from: usize, until: usize, jitter: Option<&Wave>, outputs: &mut [Wave]) {
        let mut sample = from;
        while sample < until && !self.is_settled {
            let elapsed = sample as f64 - self.position;
            let advance = if elapsed == 1.0 {
                self.whole
            } else {
                Advance::over(elapsed, self.edge_tau, self.filter_tau)
            };
            self.advance(advance);
            self.position = sample as f64;
            for (lagging, output) in self.channels.iter().zip(outputs.iter_mut()) {
                let slope = jitter.map_or(0.0, |jitter| {
                    f64::from(jitter[sample]) * (lagging.edge - lagging.filter) / self.filter_tau
                });
                output[sample] = (lagging.target + lagging.filter + slope) as f32;
            }
            sample += 1;
        }
        if sample < until {
            for (lagging, output) in self.channels.iter().zip(outputs.iter_mut()) {
                output[sample..until].fill(lagging.target as f32);
            }
            self.position = (until - 1) as f64;
        }
    }

    fn step(&mut self, at: f64, state: u32) {
        if !self.is_settled {
            let elapsed = (at - self.position).max(0.0);
            self.advance(Advance::over(elapsed, self.edge_tau, self.filter_tau));
        }
        self.position = at;
        let state = state as usize;
        if let Some(Some(tau)) = self.edges.get(state)
            && *tau != self.edge_tau
        {
            self.edge_tau = *tau;
            self.whole = Advance::over(1.0, self.edge_tau, self.filter_tau);
        }
        if let Some(targets) = self.levels.get(state) {
            for (lagging, &target) in self.channels.iter_mut().zip(targets) {
                let change = target - lagging.target;
                lagging.edge -= change;
                lagging.filter -= change;
                lagging.target = target;
            }
        }
        self.is_settled = false;
    }

    fn advance(&mut self, by: Advance) {
        let mut largest = 0.0_f64;
        for lagging in &mut self.channels {
            lagging.filter = lagging.filter * by.filter + lagging.edge * by.cross;
            lagging.edge *= by.edge;
            largest = largest.max(lagging.filter.abs()).max(lagging.edge.abs());
        }
        if largest < SETTLED {
            self.is_settled = true;
            for lagging in &mut self.channels {
                (lagging.edge, lagging.filter) = (0.0, 0.0);
            }
        }
    }

    /// Whether a block without events would hold a constant `value` in its only channel.
    pub fn is_resting_at(&self, value: f64) -> bool {
        self.is_settled && self.channels.iter().all(|lagging| lagging.target == value)
    }

    /// Passes a block over without computing it: only for a follower at rest and no events due.
    pub fn skip(&mut self) {
        self.position = -1.0;
    }
}

/// `tau`, moved away from `other` far enough for the two-pole formula.
fn apart(tau: f64, other: f64) -> f64 {
    let tau = tau.max(2.0 * SHORTEST);
    if (tau - other).abs() < 1e-4 * other { other * 1.0001 } else { tau }
}

/// Events made once and read by both legs.
#[derive(Clone, Debug, Default)]
pub(crate) struct Queue {
    /// In order of time.
    pub events: Vec<Event>,
    /// How far each leg has read.
    pub read: [usize; 2],
}

impl Queue {
    /// Forgets what both legs have read, now and then.
    pub fn tidy(&mut self) {
        let used = self.read[0].min(self.read[1]);
        if used == self.events.len() || used > 4096 {
            self.events.drain(..used);
            self.read = self.read.map(|read| read - used);
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Steps at odd instants through two lags, against the closed form of one step summed over all.
    #[test]
    fn two_lags_follow_the_closed_form_at_every_sample_and_skew() {
        let (t1, t2) = (0.7, 0.33);
        let steps = [(3.217, 1), (3.9, 0), (250.0, 1), (255.5, 0), (256.2, 1), (300.0, 0)];
        let events: Vec<Event> = steps.iter().map(|&(at, state)| Event { at, state }).collect();
        let response = |t: f64| {
            if t <= 0.0 { 0.0 } else { 1.0 - (t1 * (-t / t1).exp() - t2 * (-t / t2).exp()) / (t1 - t2) }
        };
        let mut worst = 0.0_f64;
        for delay in [0.0, 0.31, -0.4, 0.999] {
            let mut follower = Follower::new(vec![vec![-1.0], vec![2.0]], vec![Some(t1); 2], t2, delay);
            let mut read = 0;
            for block in 0..3 {
                let first = (block * BLOCK) as f64;
                let mut output = [[0.0; BLOCK]];
                follower.fill(first, &events, &mut read, None, &mut output);
                for (sample, &value) in output[0].iter().enumerate() {
                    let t = first + sample as f64 + delay;
                    let sum: f64 = steps
                        .iter()
                        .map(|&(at, state)| if state == 1 { 3.0 } else { -3.0 } * response(t - at))
                        .sum();
                    worst = worst.max((f64::from(value) - (sum - 1.0)).abs());
                }
            }
            assert_eq!(read, events.len());
        }
        println!("worst error {worst:.2e} V");
        // f32 output: half an ulp of 2 V is 1.2e-7, plus the settling threshold.
        assert!(worst < 2e-7 + SETTLED);
    }

    /// f(t + j) = f(t) + j f'(t) + O(j^2): the error falls with the square of the jitter.
    #[test]
    fn jitter_moves_a_sample_along_its_slope() {
        let events = [Event { at: 9.5, state: 1 }];
        let fill = |delay: f64, jitter: Option<f32>| {
            let mut follower = Follower::new(vec![vec![0.0], vec![1.0]], vec![Some(0.5); 2], 0.8, delay);
            let mut output = [[0.0; BLOCK]];
            let jitter = jitter.map(|value| [value; BLOCK]);
            follower.fill(0.0, &events, &mut 0, jitter.as_ref(), &mut output);
            f64::from(output[0][10])
        };
        let error = |jitter: f64| (fill(0.0, Some(jitter as f32)) - fill(jitter, None)).abs();
        assert!(fill(0.01, None) - fill(0.0, None) > 5e-3);
        assert!(error(0.01) < 1e-4, "{}", error(0.01));
        assert!(error(0.02) / error(0.01) > 3.0);
    }
}
