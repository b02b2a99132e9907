use clap::Args;
#[derive(Debug, Args)]
pub(super) struct Simulate {}
impl Simulate {
    pub(super) fn run(self) -> anyhow::Result<()> {
        Ok(())
    }
}
