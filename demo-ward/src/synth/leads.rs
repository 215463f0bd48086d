//! From the heart's dipole to twelve leads.

use super::wave::Vector;

/// What each independent lead (I, II, V1 to V6) sees of a dipole (left, down, back): Dower's coefficients, J Electrocardiol 1980;13:139
/// (from memory). They only have to give shapes that a reader would believe; no test rests on their digits.
const SEES: [Vector; 8] = [
    [0.632, -0.235, 0.059],
    [0.235, 1.066, -0.132],
    [-0.515, 0.157, -0.917],
    [0.044, 0.164, -1.387],
    [0.882, 0.098, -1.277],
    [1.213, 0.127, -0.601],
    [1.125, 0.127, -0.086],
    [0.831, 0.076, 0.230],
];

/// A dipole in the eight independent leads, in the dipole's own unit.
pub(super) fn project(dipole: Vector) -> [f64; 8] {
    let [left, down, back] = dipole;
    SEES.map(|[x, y, z]| x * left + y * down + z * back)
}

/// The standard twelve from the eight: III = II - I (Einthoven), aVR = -(I + II)/2, aVL = I - II/2, aVF = II - I/2
/// (Goldberger).
pub(super) fn twelve(eight: [f64; 8]) -> [f64; 12] {
    let [i, ii, v1, v2, v3, v4, v5, v6] = eight;
    [i, ii, ii - i, -(i + ii) / 2.0, i - ii / 2.0, ii - i / 2.0, v1, v2, v3, v4, v5, v6]
}
