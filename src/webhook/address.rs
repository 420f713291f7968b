//! Which addresses belong to the public network.

use std::net::{IpAddr, Ipv4Addr, Ipv6Addr};

/// Whether an address is an ordinary one of the public network. Refused are private, loopback, link-local, shared, multicast,
/// unspecified, documentation and reserved ones, and those that carry an IPv4 address inside, whatever that is.
///
/// References: the IANA IPv4 and IPv6 Special-Purpose Address Registries (RFC 6890, RFC 8190 and the RFCs named below). A few blocks
/// that they call globally reachable (192.0.0.9, 192.0.0.10 and parts of 2001::/23) are refused with the block around them: they
/// belong to protocols, and nobody receives notices there.
pub fn is_public(address: IpAddr) -> bool {
    match address {
        IpAddr::V4(address) => !SPECIAL_V4.iter().any(|&(block, length)| is_within_v4(address, block, length)),
        IpAddr::V6(address) => {
            let unicast = is_within_v6(address, GLOBAL_UNICAST.0, GLOBAL_UNICAST.1);
            unicast && !SPECIAL_V6.iter().any(|&(block, length)| is_within_v6(address, block, length))
        }
    }
}

const SPECIAL_V4: [(Ipv4Addr, u32); 15] = [
    (Ipv4Addr::new(0, 0, 0, 0), 8),       // this network, RFC 791
    (Ipv4Addr::new(10, 0, 0, 0), 8),      // private, RFC 1918
    (Ipv4Addr::new(100, 64, 0, 0), 10),   // shared by carriers, RFC 6598
    (Ipv4Addr::new(127, 0, 0, 0), 8),     // loopback, RFC 1122
    (Ipv4Addr::new(169, 254, 0, 0), 16),  // link-local, RFC 3927
    (Ipv4Addr::new(172, 16, 0, 0), 12),   // private, RFC 1918
    (Ipv4Addr::new(192, 0, 0, 0), 24),    // protocol assignments, RFC 6890
    (Ipv4Addr::new(192, 0, 2, 0), 24),    // documentation, RFC 5737
    (Ipv4Addr::new(192, 88, 99, 0), 24),  // 6to4 relays, withdrawn by RFC 7526
    (Ipv4Addr::new(192, 168, 0, 0), 16),  // private, RFC 1918
    (Ipv4Addr::new(198, 18, 0, 0), 15),   // benchmarks, RFC 2544
    (Ipv4Addr::new(198, 51, 100, 0), 24), // documentation, RFC 5737
    (Ipv4Addr::new(203, 0, 113, 0), 24),  // documentation, RFC 5737
    (Ipv4Addr::new(224, 0, 0, 0), 4),     // multicast, RFC 5771
    (Ipv4Addr::new(240, 0, 0, 0), 4),     // reserved, RFC 1112, and broadcast, RFC 8190
];

/// The only block that unicast addresses are assigned from (RFC 4291). Outside lie ::, ::1, IPv4-mapped ::ffff:0:0/96, the
/// translators' 64:ff9b::/96 and 64:ff9b:1::/48, discard-only 100::/64, segment ids 5f00::/16, unique-local fc00::/7, link-local
/// fe80::/10 and multicast ff00::/8.
const GLOBAL_UNICAST: (Ipv6Addr, u32) = (Ipv6Addr::new(0x2000, 0, 0, 0, 0, 0, 0, 0), 3);

const SPECIAL_V6: [(Ipv6Addr, u32); 4] = [
    (Ipv6Addr::new(0x2001, 0, 0, 0, 0, 0, 0, 0), 23), // protocol assignments, RFC 2928; Teredo among them
    (Ipv6Addr::new(0x2001, 0xdb8, 0, 0, 0, 0, 0, 0), 32), // documentation, RFC 3849
    (Ipv6Addr::new(0x2002, 0, 0, 0, 0, 0, 0, 0), 16), // 6to4, with an IPv4 address inside, RFC 3056
    (Ipv6Addr::new(0x3fff, 0, 0, 0, 0, 0, 0, 0), 20), // documentation, RFC 9637
];

fn is_within_v4(address: Ipv4Addr, block: Ipv4Addr, length: u32) -> bool {
    (address.to_bits() ^ block.to_bits()).leading_zeros() >= length
}

fn is_within_v6(address: Ipv6Addr, block: Ipv6Addr, length: u32) -> bool {
    (address.to_bits() ^ block.to_bits()).leading_zeros() >= length
}

#[cfg(test)]
mod tests {
    use super::*;

    fn public(text: &str) -> bool {
        is_public(text.parse().unwrap())
    }

    /// First and last address of every block that the IANA registries (as last updated on 22 October 2024) list as not globally
    /// reachable, with their neighbours outside where those are ordinary.
    #[test]
    fn special_blocks_are_refused_to_their_edges() {
        for (first, last, before, after) in [
            ("0.0.0.0", "0.255.255.255", None, Some("1.0.0.0")),
            ("10.0.0.0", "10.255.255.255", Some("9.255.255.255"), Some("11.0.0.0")),
            ("100.64.0.0", "100.127.255.255", Some("100.63.255.255"), Some("100.128.0.0")),
            ("127.0.0.0", "127.255.255.255", Some("126.255.255.255"), Some("128.0.0.0")),
            ("169.254.0.0", "169.254.255.255", Some("169.253.255.255"), Some("169.255.0.0")),
            ("172.16.0.0", "172.31.255.255", Some("172.15.255.255"), Some("172.32.0.0")),
            ("192.0.0.0", "192.0.0.255", Some("191.255.255.255"), Some("192.0.1.0")),
            ("192.0.2.0", "192.0.2.255", Some("192.0.1.255"), Some("192.0.3.0")),
            ("192.168.0.0", "192.168.255.255", Some("192.167.255.255"), Some("192.169.0.0")),
            ("198.18.0.0", "198.19.255.255", Some("198.17.255.255"), Some("198.20.0.0")),
            ("198.51.100.0", "198.51.100.255", Some("198.51.99.255"), Some("198.51.101.0")),
            ("203.0.113.0", "203.0.113.255", Some("203.0.112.255"), Some("203.0.114.0")),
            ("224.0.0.0", "239.255.255.255", Some("223.255.255.255"), None),
            ("240.0.0.0", "255.255.255.255", None, None),
            ("::", "::1", None, None),
            ("::ffff:0.0.0.0", "::ffff:255.255.255.255", None, None),
            ("64:ff9b::", "64:ff9b::ffff:ffff", None, None),
            ("64:ff9b:1::", "64:ff9b:1:ffff:ffff:ffff:ffff:ffff", None, None),
            ("100::", "100::ffff:ffff:ffff:ffff", None, Some("2000::1")),
            ("2001::", "2001:1ff:ffff:ffff:ffff:ffff:ffff:ffff", None, Some("2001:200::")),
            ("2001:db8::", "2001:db8:ffff:ffff:ffff:ffff:ffff:ffff", Some("2001:db7:ffff::"), Some("2001:db9::")),
            ("2002::", "2002:ffff:ffff:ffff:ffff:ffff:ffff:ffff", Some("2001:ffff::"), Some("2003::")),
            ("3fff::", "3fff:fff:ffff:ffff:ffff:ffff:ffff:ffff", Some("3ffe::"), Some("3fff:1000::")),
            ("5f00::", "5f00:ffff:ffff:ffff:ffff:ffff:ffff:ffff", None, None),
            ("fc00::", "fdff:ffff:ffff:ffff:ffff:ffff:ffff:ffff", None, None),
            ("fe80::", "febf:ffff:ffff:ffff:ffff:ffff:ffff:ffff", None, None),
            ("ff00::", "ffff:ffff:ffff:ffff:ffff:ffff:ffff:ffff", None, None),
        ] {
            assert!(!public(first) && !public(last), "{first} to {last}");
            for outside in before.into_iter().chain(after) {
                assert!(public(outside), "{outside}");
            }
        }
    }

    #[test]
    fn ordinary_addresses_are_public() {
        for text in ["8.8.8.8", "192.31.196.1", "192.52.193.1", "192.175.48.1", "2606:4700::1111", "2620:4f:8000::1"] {
            assert!(public(text), "{text}");
        }
    }

    #[test]
    fn an_address_inside_an_address_is_refused_whatever_it_is() {
        // Private and public ones: mapped (RFC 4291), translated (RFC 6052), 6to4 (RFC 3056), Teredo (RFC 4380).
        for text in ["::ffff:10.0.0.1", "::ffff:8.8.8.8", "64:ff9b::a00:1", "2002:a00:1::1", "2001:0:808:808::1"] {
            assert!(!public(text), "{text}");
        }
    }
}
