package configs

import (
	"fmt"
	"net"
	"net/netip"
	"net/url"
	"strings"
)

func (d *decoder) say(key, hint, format string, a ...any) {
	d.add(d.place(key), key, hint, format, a...)
}

// checkName checks the name of a source or sender.
func (d *decoder) checkName(key, name string, seen map[string]Position, what string) {
	if name == "" {
		return // told as missing
	}
	key += ".name"
	if !sourceName.MatchString(name) {
		d.say(key, "use letters, digits, _, - and ., at most 32, beginning with a letter or digit", "%q is no name for a %s", name, what)
	}
	if first, dup := seen[name]; dup {
		d.say(key, "rename one of the two", "the name %s is already used in line %d", name, first.Line)
		return
	}
	seen[name] = d.place(key)
}

func (d *decoder) exactlyOne(key, what string, g group) {
	var there, known []string
	for _, f := range g {
		if f.open != nil {
			known = append(known, f.key)
			if f.present() {
				there = append(there, f.key)
			}
		}
	}
	switch {
	case len(there) == 0:
		d.say(key, "add one of "+strings.Join(known, ", "), "the %s has no kind", what)
	case len(there) > 1:
		d.say(key, fmt.Sprintf("make a %s of each", what), "the %s has more than one kind: %s", what, strings.Join(there, ", "))
	}
}

// both refuses one of two keys that only make sense together.
func (d *decoder) both(key, a, va, b, vb string) {
	if va != "" && vb == "" {
		d.say(key+"."+a, "give "+b+", too", "%s without %s", a, b)
	}
	if vb != "" && va == "" {
		d.say(key+"."+b, "give "+a+", too", "%s without %s", b, a)
	}
}

// address checks a URL of one of the schemes; it returns the scheme.
func (d *decoder) address(key, s, hint string, schemes ...string) string {
	if s == "" {
		return ""
	}
	u, err := url.Parse(s)
	if err != nil || u.Host == "" || u.Hostname() == "" {
		d.say(key, hint, "%q is no address", s)
		return ""
	}
	for _, scheme := range schemes {
		if u.Scheme == scheme {
			if u.User != nil {
				d.say(key, "use user and password_file, or take them out", "a user name or password stands in the address")
			}
			return scheme
		}
	}
	d.say(key, hint, "%s:// is not known here", u.Scheme)
	return ""
}

// login checks user and password of a peer. clear says that the password would
// travel unprotected.
func (d *decoder) login(key, user, file string, clear, allowed bool, mend string) {
	if file != "" && user == "" {
		d.say(key+".password_file", "give user, too", "a password without a user")
	}
	if file != "" && clear && !allowed {
		d.say(key+".password_file", mend+"; on a network you trust write allow_clear_password: true",
			"the password would be sent where everybody can read it")
	}
}

func (d *decoder) checkSources(c *Config) {
	seen := map[string]Position{}
	for i := range c.Sources {
		s := &c.Sources[i]
		key := fmt.Sprintf("sources[%d]", i+1)
		d.checkName(key, s.Name, seen, "source")
		d.exactlyOne(key, "source", sourceSettings(s))
		if o := s.OPCUA; o != nil {
			d.checkOPCUA(key+".opcua", o)
		}
		if m := s.MQTT; m != nil {
			key := key + ".mqtt"
			scheme := d.address(key+".broker", m.Broker, "write mqtts://HOST:8883, or mqtt://HOST:1883", "mqtts", "mqtt")
			d.login(key, m.User, m.PasswordFile, scheme == "mqtt", m.AllowClearPassword, "use mqtts://")
			d.both(key, "cert_file", m.CertFile, "key_file", m.KeyFile)
			if m.Payload != "json" {
				for _, x := range [][2]string{{"value", m.Value}, {"time", m.Time}, {"quality", m.Quality}} {
					if x[1] != "" {
						d.say(key+"."+x[0], "write payload: json, or remove the key", "paths are for payload json, this source is %s", m.Payload)
					}
				}
			}
		}
	}
}

func (d *decoder) checkOPCUA(key string, o *OPCUA) {
	d.address(key+".endpoint", o.Endpoint, "write opc.tcp://HOST:4840", "opc.tcp")
	if o.Security == "None" && o.Mode != "None" {
		d.say(key+".mode", "choose a security such as Basic256Sha256, or write mode: None", "security None can neither sign nor encrypt")
	}
	if o.Security != "None" && o.Mode == "None" {
		d.say(key+".mode", "write SignAndEncrypt, or security: None", "mode None does not use security %s", o.Security)
	}
	d.login(key, o.User, o.PasswordFile, o.Security == "None", o.AllowClearPassword, "choose a security such as Basic256Sha256")
	d.both(key, "cert_file", o.CertFile, "key_file", o.KeyFile)
	if o.ServerCertFile != "" && o.CAFile != "" {
		d.say(key+".ca_file", "keep one of the two", "ca_file and server_cert_file exclude each other")
	}
}

func (d *decoder) checkSenders(c *Config) {
	seen := map[string]Position{}
	for i := range c.Advise.Senders {
		s := &c.Advise.Senders[i]
		key := fmt.Sprintf("advise.senders[%d]", i+1)
		d.checkName(key, s.Name, seen, "sender")
		d.exactlyOne(key, "sender", senderSettings(s))
		if m := s.Mail; m != nil {
			d.hostPort(key+".mail.server", m.Server, "10.1.0.9:25")
			d.login(key+".mail", m.User, m.PasswordFile, m.TLS != "required", m.AllowClearPassword, "write tls: required")
			for i, a := range append([]string{m.From}, m.To...) {
				field := ".mail.to"
				if i == 0 {
					field = ".mail.from"
				}
				if a != "" && (strings.Count(a, "@") != 1 || strings.ContainsAny(a, " <>,;")) {
					d.say(key+field, "write plain addresses such as control@kestrel-fen.example", "%q is no mail address", a)
				}
			}
		}
		if w := s.Webhook; w != nil {
			d.address(key+".webhook.url", w.URL, "write https://HOST/PATH", "https", "http")
		}
		if m := s.MQTT; m != nil {
			scheme := d.address(key+".mqtt.broker", m.Broker, "write mqtts://HOST:8883, or mqtt://HOST:1883", "mqtts", "mqtt")
			d.login(key+".mqtt", m.User, m.PasswordFile, scheme == "mqtt", m.AllowClearPassword, "use mqtts://")
			d.both(key+".mqtt", "cert_file", m.CertFile, "key_file", m.KeyFile)
			d.outside(c, key+".mqtt.prefix", m.Prefix)
		}
		if s.Syslog != nil {
			d.address(key+".syslog.address", s.Syslog.Address, "write udp://HOST:514, tcp://HOST:601 or tls://HOST:6514", "udp", "tcp", "tls")
		}
	}
}

// outside refuses to publish where the process lives.
func (d *decoder) outside(c *Config, key, topic string) {
	if topic == "" || strings.ContainsAny(topic, "+#") || strings.HasPrefix(topic, "$") || strings.HasPrefix(topic, "/") || strings.HasSuffix(topic, "/") {
		d.say(key, "write a topic such as midwatch", "%q cannot be published to", topic)
		return
	}
	const hint = "publish outside everything that is read, such as midwatch/kestrel-fen"
	if topic == "spBv1.0" || strings.HasPrefix(topic, "spBv1.0/") {
		d.say(key, hint, "%s is the namespace of the process", topic)
		return
	}
	for _, l := range c.Loops {
		for _, t := range l.Tags() {
			s := c.source(t.Source)
			if s == nil || s.MQTT == nil || s.MQTT.Payload == "sparkplug" {
				continue
			}
			read, _, _ := strings.Cut(t.Address, "#")
			parent := read[:max(strings.LastIndex(read, "/"), 0)]
			if read == topic || strings.HasPrefix(read, topic+"/") || strings.HasPrefix(topic, read+"/") ||
				parent != "" && (topic == parent || strings.HasPrefix(topic, parent+"/")) {
				d.say(key, hint, "%s lies among the topics that are read (%s of loop %s)", topic, read, l.Name)
				return
			}
		}
	}
}

func (c *Config) source(name string) *Source {
	for i := range c.Sources {
		if c.Sources[i].Name == name {
			return &c.Sources[i]
		}
	}
	return nil
}

func (d *decoder) hostPort(key, s, example string) (host string) {
	if s == "" {
		return ""
	}
	host, port, err := net.SplitHostPort(s)
	if _, perr := net.LookupPort("tcp", port); err != nil || perr != nil {
		d.say(key, "write HOST:PORT, such as "+example, "%q is no host and port", s)
		return ""
	}
	return host
}

func (d *decoder) checkPage(c *Config) {
	p := &c.Page
	before := len(d.list)
	if p.Listen == "" {
		return // told as without a value
	}
	host := d.hostPort("page.listen", p.Listen, "127.0.0.1:8420")
	ip, err := netip.ParseAddr(host)
	loopback := host == "localhost" || err == nil && ip.IsLoopback()
	if !loopback && len(d.list) == before && (p.CertFile == "" || p.KeyFile == "" || p.TokensFile == "") {
		d.say("page.listen", "add cert_file, key_file and tokens_file, or listen on 127.0.0.1:8420",
			"%s can be reached from other machines", p.Listen)
	}
	d.both("page", "cert_file", p.CertFile, "key_file", p.KeyFile)
	d.address("page.url", p.URL, "write https://HOST", "https", "http")
	if p.Prefix != "" && (!strings.HasPrefix(p.Prefix, "/") || strings.HasSuffix(p.Prefix, "/")) {
		d.say("page.prefix", "write it as /midwatch", "%q does not begin with / or ends with /", p.Prefix)
	}
}

func (d *decoder) checkKeep(c *Config) {
	if c.Keep.Full > c.Keep.Thin && c.Keep.Thin > 0 {
		d.say("keep.thin", "keep thinned frames at least as long as full ones", "thin %s is shorter than full %s",
			FormatDuration(c.Keep.Thin), FormatDuration(c.Keep.Full))
	}
}
