//! A scene as a source: invented samples, counted from a given moment.

use super::{CaptureError, Source};
use crate::detection::block::SampleBlock;
use crate::detection::time::{Stamp, Utc, samples_to_nanos};
use crate::scene::Scene;

/// Delivers a scene's samples for ever, as fast as they are asked for.
pub struct SceneSource {
    scene: Scene,
    name: String,
    start: Utc,
}

impl SceneSource {
    /// A source over `scene`, which is called `name`; its first sample is taken at `start`.
    pub fn new(scene: Scene, name: &str, start: Utc) -> SceneSource {
        SceneSource { scene, name: name.to_owned(), start }
    }
}

impl Source for SceneSource {
    fn centre_hz(&self) -> f64 {
        self.scene.spec().centre_hz
    }

    fn sample_rate_hz(&self) -> f64 {
        self.scene.spec().sample_rate_hz
    }

    fn samples_total(&self) -> Option<u64> {
        None
    }

    fn describe(&self) -> String {
        format!("invented scene {}", self.name)
    }

    fn read(&mut self, block: &mut SampleBlock, samples_max: usize) -> Result<bool, CaptureError> {
        let position = self.scene.position();
        // The truth of what has passed is nobody's need here, and would grow for ever.
        self.scene.truth().forget_before(position);
        let elapsed_ns = samples_to_nanos(position, self.sample_rate_hz());
        block.samples.resize(samples_max, Default::default());
        self.scene.fill(&mut block.samples);
        block.start = Stamp { utc: self.start, monotonic_ns: 0 }.plus_nanos(elapsed_ns);
        block.gap_before = position == 0;
        block.clipped =
            block.samples.iter().filter(|s| s.re.abs() >= 1.0 || s.im.abs() >= 1.0).count();
        Ok(true)
    }
}
