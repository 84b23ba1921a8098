//! The samples of an invented site, made from a seed, and the truth about them.
//!
//! Pure and deterministic, as the detector is: no clock, no file, no thread. The same spec and seed
//! give the same samples, however they are fetched, on the same machine to the last bit; another
//! processor may round the transforms differently. Nothing here may ever be taken for a real site.
//!
//! - [`SceneSpec`] says what there is to hear; [`SceneSpec::lower_saltmarsh`] ships with it.
//! - [`Scene`] makes the samples.
//! - [`Truth`] knows who was on and when.

mod saltmarsh;
mod source;
mod spec;
mod synthesis;
mod timeline;
mod truth;

#[cfg(test)]
mod tests;

pub use spec::{FLOOR_BANDWIDTH_HZ, Habit, Hours, RasterChannel, SceneSpec, User, UserKind};
pub use synthesis::Scene;
pub use timeline::Transmission;
pub use truth::Truth;
