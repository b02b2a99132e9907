//! `railtide ports`: the serial ports there are.

use std::path::Path;

use clap::Args;

use super::Format;
use crate::logger::{PortInfo, UsbDevice, ports};

/// Arguments of `ports`.
#[derive(Debug, Args)]
pub(super) struct Ports {
    /// How to print.
    #[arg(long, value_enum, default_value_t)]
    format: Format,
}

impl Ports {
    pub(super) fn run(self) -> anyhow::Result<()> {
        let found = ports(Path::new("/"));
        match self.format {
            Format::Json => super::print_json(&found),
            Format::Text if found.is_empty() => super::print(
                "No serial port. Is the logger plugged in, and its cable one that carries data?\n",
            ),
            Format::Text => super::print(&found.iter().map(sentence).collect::<String>()),
        }
    }
}

fn sentence(port: &PortInfo) -> String {
    let mut text =
        format!("{}  {}\n", port.device.display(), port.usb.as_ref().map_or("no USB device".into(), device));
    for link in &port.links {
        text += &format!("    for the config: port = \"{}\"\n", link.display());
    }
    text
}

fn device(usb: &UsbDevice) -> String {
    let names: Vec<&str> =
        [&usb.manufacturer, &usb.product].into_iter().filter_map(|n| n.as_deref()).collect();
    let serial = usb.serial_number.as_ref().map_or(String::new(), |n| format!(", serial number {n}"));
    format!("{} (USB {:04x}:{:04x}{serial})", names.join(" "), usb.vendor_id, usb.product_id)
}
