//! Reading the weights file: plain text, whole numbers with one scale per output, one section per net.
//!
//! ```text
//! # lines like this are the card
//! net t-end-1 dilations 1 2 4 6 1
//! tensor e1w 7 7 16
//! scale 0.0031 0.0028 …            one for each of the 16 outputs
//! -12 3 40 …                       one line per tap and input: 16 whole numbers
//! bias e1b 0.012 -0.4 …
//! ```

use std::collections::BTreeMap;

/// Why a text is not a weights file. The shipped one is read once, in a test and at first use.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub(crate) enum NotWeights {
    /// A line that is none of the kinds above, or holds something that is not a number.
    #[error("weights, line {0}: not understood")]
    Line(usize),
    /// A tensor that the net needs is not there.
    #[error("weights: no tensor {0}")]
    Missing(String),
    /// Shapes that do not fit one another.
    #[error("weights: shapes do not fit")]
    Shape,
}

/// The named arrays of one net.
#[derive(Debug, Clone, Default)]
pub(crate) struct Tensors {
    dilations: Vec<usize>,
    arrays: BTreeMap<String, (Vec<usize>, Vec<f32>)>,
}

impl Tensors {
    /// Shape and values (row-major, outputs last).
    pub(crate) fn get(&self, name: &str) -> Result<(&[usize], &[f32]), NotWeights> {
        self.arrays
            .get(name)
            .map(|(shape, values)| (shape.as_slice(), values.as_slice()))
            .ok_or_else(|| NotWeights::Missing(name.to_owned()))
    }

    /// The steps between taps of the trunk's layers, in order.
    pub(crate) fn dilations(&self) -> &[usize] {
        &self.dilations
    }

    fn fits(&self) -> bool {
        self.arrays.values().all(|(shape, values)| shape.iter().product::<usize>() == values.len())
    }
}

/// Reads every net of a weights file, by name.
pub(crate) fn parse(text: &str) -> Result<BTreeMap<String, Tensors>, NotWeights> {
    let mut nets: BTreeMap<String, Tensors> = BTreeMap::new();
    let mut net = String::new();
    let mut tensor = String::new();
    let mut scale: Vec<f32> = Vec::new();
    for (i, line) in text.lines().enumerate() {
        let wrong = || NotWeights::Line(i + 1);
        let mut words = line.split_ascii_whitespace();
        let current = nets.get_mut(&net);
        match words.clone().next() {
            None => {}
            Some(word) if word.starts_with('#') => {}
            Some("net") => {
                words.next();
                words.next().ok_or_else(wrong)?.clone_into(&mut net);
                if words.next() != Some("dilations") {
                    return Err(wrong());
                }
                let dilations = numbers(words).ok_or_else(wrong)?;
                nets.insert(net.clone(), Tensors { dilations, ..Tensors::default() });
            }
            Some("tensor") => {
                words.next();
                words.next().ok_or_else(wrong)?.clone_into(&mut tensor);
                let shape = numbers(words).ok_or_else(wrong)?;
                let current = current.ok_or_else(wrong)?;
                current.arrays.insert(tensor.clone(), (shape, Vec::new()));
            }
            Some("bias") => {
                words.next();
                let name = words.next().ok_or_else(wrong)?.to_owned();
                let values: Vec<f32> = numbers(words).ok_or_else(wrong)?;
                let current = current.ok_or_else(wrong)?;
                current.arrays.insert(name, (vec![values.len()], values));
            }
            Some("scale") => {
                words.next();
                scale = numbers(words).ok_or_else(wrong)?;
            }
            Some(_) => {
                let row: Vec<f32> = numbers(words).ok_or_else(wrong)?;
                let (_, values) = current
                    .and_then(|tensors| tensors.arrays.get_mut(&tensor))
                    .ok_or_else(wrong)?;
                if row.len() != scale.len() {
                    return Err(wrong());
                }
                values.extend(row.iter().zip(&scale).map(|(n, s)| n * s));
            }
        }
    }
    if nets.values().all(Tensors::fits) { Ok(nets) } else { Err(NotWeights::Shape) }
}

fn numbers<'a, T: std::str::FromStr>(words: impl Iterator<Item = &'a str>) -> Option<Vec<T>> {
    words.map(|word| word.parse().ok()).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_tensor_is_its_whole_numbers_times_its_scales() -> Result<(), NotWeights> {
        let nets = parse(
            "# card\nnet a dilations 1 2\ntensor xw 1 2 2\nscale 0.5 2\n1 2\n3 -4\nbias xb 0.25 1\n",
        )?;
        let a = &nets["a"];
        assert_eq!(a.dilations(), [1, 2]);
        assert_eq!(a.get("xw")?, (&[1, 2, 2][..], &[0.5, 4.0, 1.5, -8.0][..]));
        assert_eq!(a.get("xb")?.1, [0.25, 1.0]);
        Ok(())
    }

    #[test]
    fn a_row_too_short_or_a_word_is_refused_with_its_line() {
        let short = "net a dilations 1\ntensor xw 1 1 2\nscale 1 1\n1\n";
        assert_eq!(parse(short).err(), Some(NotWeights::Line(4)));
        assert_eq!(parse("net a dilations 1\nhello\n").err(), Some(NotWeights::Line(2)));
        let missing_row = "net a dilations 1\ntensor xw 1 2 1\nscale 1\n1\n";
        assert_eq!(parse(missing_row).err(), Some(NotWeights::Shape));
    }
}
