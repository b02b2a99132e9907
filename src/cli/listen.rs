use clap::Args;
#[derive(Debug, Args)]
pub(super) struct Listen {}
impl Listen {
    pub(super) fn run(self, _c: Option<std::path::PathBuf>) -> anyhow::Result<()> {
        Ok(())
    }
}
