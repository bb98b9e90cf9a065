package config

import (
	"fmt"
	"net"
	"net/mail"
	"net/netip"
	"net/url"
	"slices"
	"strconv"
	"strings"
)

// address wants host:port to listen on. Port 0 takes any free one.
func address(s string) (string, string) {
	const cure = `write host:port, such as "127.0.0.1:9464"`
	host, port, err := net.SplitHostPort(s)
	if err != nil {
		return fmt.Sprintf("%q is not an address", clip(s)), cure
	}
	if _, err := strconv.ParseUint(port, 10, 16); err != nil {
		return fmt.Sprintf("port %q of %q is not a number from 0 to 65535", clip(port), clip(s)), cure
	}
	if !hostname(host) {
		return fmt.Sprintf("host %q of %q is neither a name nor an IP address", clip(host), clip(s)), cure + "; 0.0.0.0 listens everywhere"
	}
	return "", ""
}

// server wants host:port to call.
func server(s string) (string, string) {
	if wrong, _ := address(s); wrong != "" {
		return wrong, `write host:port, such as "mail.example.org:587"`
	}
	if _, port, _ := net.SplitHostPort(s); port == "0" {
		return "port 0 cannot be called", "write the server's port: 587 for mail with STARTTLS"
	}
	return "", ""
}

// onLoopback wants an address of this machine only.
func onLoopback(s string) (string, string) {
	if host, _, err := net.SplitHostPort(s); err == nil && !loopback(host) {
		return fmt.Sprintf("%q can be reached from the network; without TLS, which is not in this version yet, passwords would cross it in clear", s), `listen on "127.0.0.1:4222" and let gateways come through a tunnel`
	}
	return "", ""
}

// loopback tells whether a host is this machine without asking any resolver.
func loopback(host string) bool {
	if host == "localhost" {
		return true // RFC 6761 section 6.3
	}
	ip, err := netip.ParseAddr(host)
	return err == nil && ip.Unmap().IsLoopback()
}

// hostname wants an IP address, or a name of letters, digits, hyphens and dots
// (RFC 1123 section 2.1).
func hostname(s string) bool {
	if _, err := netip.ParseAddr(s); err == nil {
		return true
	}
	if len(s) > 253 {
		return false
	}
	for label := range strings.SplitSeq(strings.TrimSuffix(s, "."), ".") {
		if label == "" || len(label) > 63 || label[0] == '-' || label[len(label)-1] == '-' {
			return false
		}
		for _, c := range []byte(label) {
			if (c < 'a' || c > 'z') && (c < 'A' || c > 'Z') && (c < '0' || c > '9') && c != '-' {
				return false
			}
		}
	}
	return true
}

// natsURL wants the URL of a NATS server, without a password in it.
func natsURL(s string) (string, string) {
	const cure = `write "tls://broker.example.org:4222", or nats:// for a server on this machine`
	u, err := parseURL(s)
	switch {
	case err != nil:
		return err.Error(), cure
	case u.User != nil:
		return "a user or password in the URL would show in logs", "put them into the credentials file"
	case u.Scheme == "tls" || u.Scheme == "nats" && loopback(u.Hostname()):
	case u.Scheme == "nats":
		return fmt.Sprintf("%q would cross the network in clear", clip(s)), "write tls:// in place of nats://"
	default:
		return fmt.Sprintf("unknown scheme %q", clip(u.Scheme)), cure
	}
	if u.Path != "" && u.Path != "/" || u.RawQuery != "" || u.Fragment != "" {
		return fmt.Sprintf("%q has more than host and port", clip(s)), cure
	}
	return "", ""
}

// webhookURL wants https, or http to this machine.
func webhookURL(s string) (string, string) {
	const cure = `write "https://hooks.example.org/forest"`
	u, err := parseURL(s)
	switch {
	case err != nil:
		return err.Error(), cure
	case u.User != nil:
		return "a user or password in the URL would show in logs", "use secret_file, and let the receiver check the signature"
	case u.Fragment != "":
		return "a URL to post to has no #fragment", "remove it"
	case u.Scheme == "https" || u.Scheme == "http" && loopback(u.Hostname()):
		return "", ""
	case u.Scheme == "http":
		return fmt.Sprintf("%q would cross the network in clear", clip(s)), "write https:// in place of http://"
	}
	return fmt.Sprintf("unknown scheme %q", clip(u.Scheme)), cure
}

// privateNetworks are those that are somebody's own: RFC 1918, the shared space
// of RFC 6598, which networks laid over others use, and the unique local
// addresses of RFC 4193.
var privateNetworks = []netip.Prefix{
	netip.MustParsePrefix("10.0.0.0/8"), netip.MustParsePrefix("172.16.0.0/12"), netip.MustParsePrefix("192.168.0.0/16"),
	netip.MustParsePrefix("100.64.0.0/10"), netip.MustParsePrefix("fc00::/7"),
}

// privateNetwork wants a network in CIDR notation (RFC 4632 section 3.1) that
// is private as a whole.
func privateNetwork(s string) (string, string) {
	const cure = `write the receiver's network, such as "10.1.0.0/16"`
	p, err := netip.ParsePrefix(s)
	ip, addressErr := netip.ParseAddr(s)
	if addressErr == nil && ip.Zone() == "" {
		p, err = netip.PrefixFrom(ip, ip.BitLen()), nil
	}
	switch {
	case err != nil:
		return fmt.Sprintf("%q is not a network", clip(s)), cure
	case !slices.ContainsFunc(privateNetworks, func(n netip.Prefix) bool { return n.Bits() <= p.Bits() && n.Contains(p.Addr()) }):
		return fmt.Sprintf("%q is not private, which is within 10.0.0.0/8, 172.16.0.0/12, 192.168.0.0/16, 100.64.0.0/10 or fc00::/7", clip(s)), "remove it; public addresses need no entry, and this machine is reached by 127.0.0.1, [::1] or localhost in the url"
	case addressErr == nil:
		return fmt.Sprintf("%q is an address, want a network", s), fmt.Sprintf("for this address alone write %q", p)
	case p != p.Masked():
		return fmt.Sprintf("%q names an address within the network", s), fmt.Sprintf("write %q", p.Masked())
	}
	return "", ""
}

// parseURL never repeats the URL whole: it may hold a password.
func parseURL(s string) (*url.URL, error) {
	u, err := url.Parse(s)
	if err != nil || u.Opaque != "" || u.Host == "" || !hostname(u.Hostname()) {
		return nil, fmt.Errorf("not a URL with scheme and host")
	}
	if port := u.Port(); port != "" {
		if n, err := strconv.ParseUint(port, 10, 16); err != nil || n == 0 {
			return nil, fmt.Errorf("port %q is not a number from 1 to 65535", clip(port))
		}
	}
	return u, nil
}

// mailAddress wants a plain address: no name, no comment, no line break, so
// that nothing can be smuggled into a header or an SMTP command.
func mailAddress(s string) (string, string) {
	const cure = `write only the address, such as "forester@example.org"`
	if strings.ContainsAny(s, "\r\n") {
		return "a line break in an address", cure
	}
	a, err := mail.ParseAddress(s)
	if err != nil {
		return fmt.Sprintf("%q is not a mail address", clip(s)), cure
	}
	if a.Name != "" || a.Address != s || strings.ContainsAny(s, "\" <>()\t") {
		return fmt.Sprintf("%q is more than a plain address", clip(s)), cure
	}
	return "", ""
}
