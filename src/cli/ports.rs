use clap::Args;
#[derive(Debug, Args)]
pub(super) struct Ports {}
impl Ports {
    pub(super) fn run(self) -> anyhow::Result<()> {
        Ok(())
    }
}
