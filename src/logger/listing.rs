//! The serial ports of this machine, and what is known of the devices behind them.

use std::collections::BTreeMap;
use std::fs;
use std::path::{Path, PathBuf};

/// A serial port.
#[derive(Clone, Debug, PartialEq, Eq, serde::Serialize)]
pub struct PortInfo {
    /// Its device, such as `/dev/ttyACM0`. The number can change when it is plugged in anew.
    pub device: PathBuf,
    /// Lasting names for the same device, from `/dev/serial/by-id`: the ones to put into the config.
    pub links: Vec<PathBuf>,
    /// What is known of the USB device, if it is one.
    pub usb: Option<UsbDevice>,
}

/// What a USB device says of itself.
#[derive(Clone, Debug, PartialEq, Eq, serde::Serialize)]
pub struct UsbDevice {
    /// The maker's number, given out by the USB Implementers Forum.
    pub vendor_id: u16,
    /// The maker's number for the product.
    pub product_id: u16,
    /// The maker's name.
    pub manufacturer: Option<String>,
    /// The product's name.
    pub product: Option<String>,
    /// The serial number, if it has one.
    pub serial_number: Option<String>,
}

/// The serial ports there are, in the order of their names. `root` is `/`; a test lays its own.
///
/// On Linux this reads `sys/class/tty` and `dev/serial/by-id` below `root`; ports built into the board that have no
/// hardware behind them are left out, as are terminals. On other systems it is what `serialport` finds. Nothing is
/// opened: opening a port can reset the device behind it.
pub fn ports(root: &Path) -> Vec<PortInfo> {
    let found = if cfg!(target_os = "linux") { sysfs_ports(root) } else { library_ports() };
    let mut links = links_by_device(root);
    let mut ports: Vec<_> = found
        .into_iter()
        .map(|(device, usb)| PortInfo { links: links.remove(&device).unwrap_or_default(), device, usb })
        .collect();
    ports.sort_by(|a, b| a.device.cmp(&b.device));
    ports
}

type Found = (PathBuf, Option<UsbDevice>);

fn sysfs_ports(root: &Path) -> Vec<Found> {
    let Ok(entries) = fs::read_dir(root.join("sys/class/tty")) else {
        return Vec::new();
    };
    entries
        .flatten()
        .filter_map(|entry| {
            // Consoles and pseudo-terminals have no device behind them.
            let interface = fs::canonicalize(entry.path().join("device")).ok()?;
            // The kernel reserves names for UARTs that the board may not have: type 0 is none.
            if read_word(&entry.path().join("type")).as_deref() == Some("0") {
                return None;
            }
            Some((Path::new("/dev").join(entry.file_name()), usb_device(&interface)))
        })
        .collect()
}

/// The USB device that an interface belongs to: the nearest folder above it that has a vendor.
fn usb_device(interface: &Path) -> Option<UsbDevice> {
    let number = |folder: &Path, name| u16::from_str_radix(&read_word(&folder.join(name))?, 16).ok();
    let folder = interface.ancestors().find(|folder| folder.join("idVendor").exists())?;
    Some(UsbDevice {
        vendor_id: number(folder, "idVendor")?,
        product_id: number(folder, "idProduct")?,
        manufacturer: read_word(&folder.join("manufacturer")),
        product: read_word(&folder.join("product")),
        serial_number: read_word(&folder.join("serial")),
    })
}

fn read_word(path: &Path) -> Option<String> {
    let text = fs::read(path).ok()?;
    let word = String::from_utf8_lossy(&text).trim().to_owned();
    (!word.is_empty()).then_some(word)
}

fn library_ports() -> Vec<Found> {
    let ports = serialport::available_ports().unwrap_or_default();
    let usb = |kind| match kind {
        serialport::SerialPortType::UsbPort(usb) => Some(UsbDevice {
            vendor_id: usb.vid,
            product_id: usb.pid,
            manufacturer: usb.manufacturer,
            product: usb.product,
            serial_number: usb.serial_number,
        }),
        _ => None,
    };
    ports.into_iter().map(|port| (PathBuf::from(port.port_name), usb(port.port_type))).collect()
}

/// The links under `dev/serial/by-id`, by the device that they lead to.
fn links_by_device(root: &Path) -> BTreeMap<PathBuf, Vec<PathBuf>> {
    const FOLDER: &str = "dev/serial/by-id";
    let mut links: BTreeMap<PathBuf, Vec<PathBuf>> = BTreeMap::new();
    for entry in fs::read_dir(root.join(FOLDER)).into_iter().flatten().flatten() {
        let Some(name) = fs::read_link(entry.path()).ok().and_then(|to| Some(to.file_name()?.to_owned()))
        else {
            continue;
        };
        let link = Path::new("/").join(FOLDER).join(entry.file_name());
        links.entry(Path::new("/dev").join(name)).or_default().push(link);
    }
    links.values_mut().for_each(|links| links.sort());
    links
}

#[cfg(all(test, target_os = "linux"))]
mod tests {
    use std::os::unix::fs::symlink;

    use super::*;

    /// A machine with a USB logger, a USB adapter (its tty hangs one folder deeper), a UART of the board, one that the
    /// board doesn't have, and a console. Laid out as the kernel lays out sysfs.
    fn machine() -> tempfile::TempDir {
        let root = tempfile::tempdir().unwrap();
        let make = |path: &str| fs::create_dir_all(root.path().join(path)).unwrap();
        let write = |path: &str, text: &str| fs::write(root.path().join(path), text).unwrap();
        let link = |to: &str, path: &str| symlink(to, root.path().join(path)).unwrap();
        make("sys/class/tty");
        make("dev/serial/by-id");
        let tty = |folder: &str, name: &str| {
            make(&format!("{folder}/tty/{name}"));
            link("../..", &format!("{folder}/tty/{name}/device"));
            link(&format!("../../../{folder}/tty/{name}"), &format!("sys/class/tty/{name}"));
        };

        tty("sys/devices/usb1/1-1/1-1:1.0", "ttyACM0");
        for (name, text) in [
            ("idVendor", "1209\n"),
            ("idProduct", "00a7\n"),
            ("manufacturer", "A Workshop\n"),
            ("product", "Mains logger\n"),
            ("serial", "0042\n"),
        ] {
            write(&format!("sys/devices/usb1/1-1/{name}"), text);
        }
        link("../../ttyACM0", "dev/serial/by-id/usb-A_Workshop_Mains_logger_0042-if00");

        tty("sys/devices/usb1/1-2/1-2:1.0/ttyUSB0", "ttyUSB0");
        write("sys/devices/usb1/1-2/idVendor", "0403\n");
        write("sys/devices/usb1/1-2/idProduct", "6001\n");

        tty("sys/devices/platform/uart0", "ttyS0");
        write("sys/devices/platform/uart0/tty/ttyS0/type", "4\n");
        tty("sys/devices/platform/uart1", "ttyS1");
        write("sys/devices/platform/uart1/tty/ttyS1/type", "0\n");
        make("sys/class/tty/tty0");
        root
    }

    #[test]
    fn ports_are_listed_with_what_their_usb_devices_say_and_their_lasting_names() {
        let root = machine();
        let adapter = UsbDevice {
            vendor_id: 0x0403,
            product_id: 0x6001,
            manufacturer: None,
            product: None,
            serial_number: None,
        };
        let logger = UsbDevice {
            vendor_id: 0x1209,
            product_id: 0x00A7,
            manufacturer: Some("A Workshop".to_owned()),
            product: Some("Mains logger".to_owned()),
            serial_number: Some("0042".to_owned()),
        };
        let port = |device: &str, usb| PortInfo { device: device.into(), links: Vec::new(), usb };
        let by_id = PathBuf::from("/dev/serial/by-id/usb-A_Workshop_Mains_logger_0042-if00");
        let expected = [
            PortInfo { links: vec![by_id], ..port("/dev/ttyACM0", Some(logger)) },
            port("/dev/ttyS0", None),
            port("/dev/ttyUSB0", Some(adapter)),
        ];
        assert_eq!(ports(root.path()), expected);
    }

    #[test]
    fn a_machine_without_sysfs_has_no_ports_to_list() {
        assert_eq!(ports(Path::new("/nowhere")), []);
    }
}
