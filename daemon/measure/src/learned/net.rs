//! A small convolutional net over the leads of one averaged beat, evaluated in plain Rust.
//!
//! Every lead goes through the same encoder; the mean and the maximum over the leads go through a trunk,
//! which answers for the heart as a whole; a small decoder then answers for each lead from that lead's own
//! encoding and the trunk's. So the order of the leads cannot matter, and their number may vary.
//!
//! Arrays are time-major (`[time][channel]`, flat), `f32`. The weights come from a readable text file, see
//! [`Net::parse`].

#![allow(
    clippy::indexing_slicing,
    reason = "fixed shapes, checked once when the weights are parsed"
)]

use super::weights::{NotWeights, Tensors};

/// Log-odds over time, before normalising: one row of `outputs` values per time step.
#[derive(Debug, Clone, PartialEq)]
pub(crate) struct Logits {
    /// For all leads together: `[time][output]`.
    pub(crate) global: Vec<f32>,
    /// For each lead, in the order given: `[time][output]`.
    pub(crate) leads: Vec<Vec<f32>>,
}

/// The trained net. Its sizes are read from the weights file.
#[derive(Debug, Clone)]
pub(crate) struct Net {
    channels: usize,
    outputs: usize,
    encode: [Conv; 2],
    enter: Conv,
    trunk: Vec<Conv>,
    global: Conv,
    context: Conv,
    decode: [Conv; 2],
    lead: Conv,
}

impl Net {
    /// Builds the net from named tensors: `e1`, `e2` (encoder), `in`, `t0`… (trunk), `go` (global output),
    /// `di`, `d0`, `d1` (decoder), `lo` (lead output), each with its bias.
    ///
    /// # Errors
    /// When a tensor is missing or its shape does not fit its neighbours.
    pub(crate) fn parse(tensors: &Tensors) -> Result<Self, NotWeights> {
        let conv = |name: &str, dilation: usize| Conv::parse(tensors, name, dilation);
        let dilations = tensors.dilations();
        let trunk = dilations
            .iter()
            .enumerate()
            .map(|(i, &d)| conv(&format!("t{i}"), d))
            .collect::<Result<Vec<_>, _>>()?;
        let net = Self {
            encode: [conv("e1", 1)?, conv("e2", 2)?],
            enter: conv("in", 1)?,
            trunk,
            global: conv("go", 1)?,
            context: conv("di", 1)?,
            decode: [conv("d0", 2)?, conv("d1", 4)?],
            lead: conv("lo", 1)?,
            channels: 0,
            outputs: 0,
        };
        net.checked()
    }

    /// Input channels per lead and time step.
    pub(crate) fn channels(&self) -> usize {
        self.channels
    }

    /// Outputs per time step: how many marks the net places.
    pub(crate) fn outputs(&self) -> usize {
        self.outputs
    }

    fn checked(mut self) -> Result<Self, NotWeights> {
        let (e, h, d) = (self.encode[0].out, self.enter.out, self.context.out);
        let fits = self.encode[1].is(e, e)
            && self.enter.is(2 * e + 1, h)
            && self.trunk.len() > 1
            && self.trunk.iter().all(|c| c.is(h, h))
            && self.global.inputs == 2 * h
            && self.context.is(h, d)
            && self.decode[0].is(e + d, d)
            && self.decode[1].is(d, d)
            && self.lead.is(2 * d, self.global.out);
        if !fits {
            return Err(NotWeights::Shape);
        }
        self.channels = self.encode[0].inputs;
        self.outputs = self.global.out;
        Ok(self)
    }

    /// Evaluates the net on the leads of one beat: each `[time][channel]`, all of the same length.
    /// No leads give no answer for leads and a flat one for all together.
    pub(crate) fn forward(&self, leads: &[Vec<f32>]) -> Logits {
        let steps = leads.first().map_or(0, |lead| lead.len() / self.channels.max(1));
        let encoded: Vec<Vec<f32>> = leads.iter().map(|lead| self.encode(lead, steps)).collect();
        let mut z = self.enter.apply_relu(&self.pool(&encoded, steps), steps);
        let mut early = Vec::new();
        for (i, layer) in self.trunk.iter().enumerate() {
            layer.add_relu(&mut z, steps);
            if i == 1 {
                early.clone_from(&z);
            }
        }
        let global = self.global.apply(&beside(&early, &z, steps), steps);
        let context = self.context.apply(&z, steps);
        let leads = encoded.iter().map(|own| self.decode(own, &context, steps)).collect();
        Logits { global, leads }
    }

    fn encode(&self, lead: &[f32], steps: usize) -> Vec<f32> {
        let mut h = self.encode[0].apply_relu(lead, steps);
        self.encode[1].add_relu(&mut h, steps);
        h
    }

    fn decode(&self, own: &[f32], context: &[f32], steps: usize) -> Vec<f32> {
        let first = self.decode[0].apply_relu(&beside(own, context, steps), steps);
        let mut last = first.clone();
        self.decode[1].add_relu(&mut last, steps);
        self.lead.apply(&beside(&first, &last, steps), steps)
    }

    /// Mean and maximum over the leads, and how few they are.
    #[allow(clippy::cast_precision_loss, reason = "a handful of leads")]
    fn pool(&self, encoded: &[Vec<f32>], steps: usize) -> Vec<f32> {
        let e = self.encode[0].out;
        let n = encoded.len().max(1) as f32;
        let mut out = vec![0.0; steps * (2 * e + 1)];
        for (t, row) in out.chunks_exact_mut(2 * e + 1).enumerate() {
            for lead in encoded {
                for (c, &v) in lead[t * e..(t + 1) * e].iter().enumerate() {
                    row[c] += v / n;
                    row[e + c] = row[e + c].max(v);
                }
            }
            row[2 * e] = 2.0 / n;
        }
        out
    }
}

/// Two arrays of the same length side by side: the channels of `a`, then those of `b`.
fn beside(a: &[f32], b: &[f32], steps: usize) -> Vec<f32> {
    let (ca, cb) = (a.len() / steps.max(1), b.len() / steps.max(1));
    let mut out = Vec::with_capacity(a.len() + b.len());
    for t in 0..steps {
        out.extend_from_slice(&a[t * ca..(t + 1) * ca]);
        out.extend_from_slice(&b[t * cb..(t + 1) * cb]);
    }
    out
}

/// One convolution over time, zero beyond the ends, with its bias.
#[derive(Debug, Clone)]
struct Conv {
    taps: usize,
    inputs: usize,
    out: usize,
    dilation: usize,
    /// `[block of outputs][tap][input]`, each entry one block.
    weights: Vec<[f32; BLOCK]>,
    bias: Vec<[f32; BLOCK]>,
}

/// Outputs are computed in blocks of this many, for `STEPS` times at once: as many sums as fit into the vector
/// registers that every x86-64 and every 64-bit Arm has.
const BLOCK: usize = 12;
const STEPS: usize = 4;

impl Conv {
    fn parse(tensors: &Tensors, name: &str, dilation: usize) -> Result<Self, NotWeights> {
        let (shape, values) = tensors.get(&format!("{name}w"))?;
        let (_, bias) = tensors.get(&format!("{name}b"))?;
        let &[taps, inputs, out] = shape else {
            return Err(NotWeights::Shape);
        };
        if bias.len() != out || taps % 2 == 0 || out == 0 {
            return Err(NotWeights::Shape);
        }
        let block = |row: &[f32], first: usize| {
            let mut block = [0.0; BLOCK];
            for (b, v) in block.iter_mut().zip(&row[first..]) {
                *b = *v;
            }
            block
        };
        let firsts = || (0..out).step_by(BLOCK);
        Ok(Self {
            taps,
            inputs,
            out,
            dilation,
            weights: firsts()
                .flat_map(|first| values.chunks_exact(out).map(move |row| block(row, first)))
                .collect(),
            bias: firsts().map(|first| block(bias, first)).collect(),
        })
    }

    fn is(&self, inputs: usize, out: usize) -> bool {
        self.inputs == inputs && self.out == out
    }

    fn apply(&self, x: &[f32], steps: usize) -> Vec<f32> {
        let mut y = vec![0.0; steps * self.out];
        self.run(x, steps, &mut y);
        y
    }

    fn apply_relu(&self, x: &[f32], steps: usize) -> Vec<f32> {
        let mut y = self.apply(x, steps);
        y.iter_mut().for_each(|v| *v = v.max(0.0));
        y
    }

    /// `x += max(0, conv(x))`: a residual layer.
    fn add_relu(&self, x: &mut [f32], steps: usize) {
        let y = self.apply(x, steps);
        for (a, b) in x.iter_mut().zip(&y) {
            *a += b.max(0.0);
        }
    }

    fn run(&self, x: &[f32], steps: usize, y: &mut [f32]) {
        let (n, out) = (self.inputs, self.out);
        let reach = self.taps / 2 * self.dilation;
        // The input with zeros on both sides, so that the inner loop never asks where it is.
        let mut wide = vec![0.0; (steps + 2 * reach + STEPS) * n];
        wide[reach * n..(reach + steps) * n].copy_from_slice(&x[..steps * n]);
        let blocks = self.weights.chunks_exact(self.taps * n).zip(&self.bias);
        for (b, (weights, bias)) in blocks.enumerate() {
            let first = b * BLOCK;
            let width = BLOCK.min(out - first);
            for t in (0..steps).step_by(STEPS) {
                let mut sums = [*bias; STEPS];
                for (tap, weights) in weights.chunks_exact(n).enumerate() {
                    let at = (t + tap * self.dilation) * n;
                    multiply_add(&mut sums, weights, &wide[at..at + STEPS * n]);
                }
                for (sum, row) in sums.iter().zip(y[t * out..].chunks_mut(out)) {
                    row[first..first + width].copy_from_slice(&sum[..width]);
                }
            }
        }
    }
}

/// Adds one tap's share: `STEPS` rows of inputs, one block of weights for each input.
#[inline]
fn multiply_add(sums: &mut [[f32; BLOCK]; STEPS], weights: &[[f32; BLOCK]], rows: &[f32]) {
    let n = weights.len();
    let (r0, rest) = rows.split_at(n);
    let (r1, rest) = rest.split_at(n);
    let (r2, r3) = rest.split_at(n);
    let [mut s0, mut s1, mut s2, mut s3] = *sums;
    for ((((w, a), b), c), d) in weights.iter().zip(r0).zip(r1).zip(r2).zip(r3) {
        for k in 0..BLOCK {
            s0[k] += w[k] * a;
            s1[k] += w[k] * b;
            s2[k] += w[k] * c;
            s3[k] += w[k] * d;
        }
    }
    *sums = [s0, s1, s2, s3];
}
