use clap::Args;
#[derive(Debug, Args)]
pub(super) struct Demo {}
impl Demo {
    pub(super) fn run(self) -> anyhow::Result<()> {
        Ok(())
    }
}
