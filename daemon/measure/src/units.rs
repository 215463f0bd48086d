//! The units of a signal. A bare `f64` never leaves a public function without one of these, or a
//! field name that carries the unit.

macro_rules! unit {
    ($(#[$doc:meta])* $name:ident) => {
        $(#[$doc])*
        #[derive(Debug, Clone, Copy, PartialEq, PartialOrd)]
        pub struct $name(f64);

        impl $name {
            /// The number, or `None` where it is infinite or not a number.
            pub fn new(value: f64) -> Option<Self> {
                value.is_finite().then_some(Self(value))
            }

            /// The bare number, in this type's unit.
            pub const fn get(self) -> f64 {
                self.0
            }
        }
    };
}

unit!(
    /// Milliseconds.
    Ms
);
unit!(
    /// Samples per second.
    Hz
);
unit!(
    /// Seconds from the first sample of the file.
    Seconds
);
unit!(
    /// Beats per minute.
    PerMinute
);
unit!(
    /// Microvolts.
    Microvolts
);
