package configs

import "time"

// sourceSettings are the keys of a source.
func sourceSettings(s *Source) group {
	return group{
		{key: "name", required: true, help: "give the source a name: letters, digits, _, - and ., at most 32", value: textValue{&s.Name}},
		{key: "opcua", help: "an OPC UA server", present: func() bool { return s.OPCUA != nil }, open: func() group {
			if s.OPCUA == nil {
				s.OPCUA = &OPCUA{}
			}
			return opcuaSettings(s.OPCUA)
		}},
		{key: "mqtt", help: "an MQTT 3.1.1 broker", present: func() bool { return s.MQTT != nil }, open: func() group {
			if s.MQTT == nil {
				s.MQTT = &MQTT{}
			}
			return mqttSettings(s.MQTT)
		}},
	}
}

func opcuaSettings(o *OPCUA) group {
	return group{
		{key: "endpoint", required: true, help: "write opc.tcp://HOST:4840", value: textValue{&o.Endpoint}},
		{key: "security", def: "Basic256Sha256", help: "None, Basic256Sha256, Aes128_Sha256_RsaOaep or Aes256_Sha256_RsaPss", value: choice{&o.Security, []string{"None", "Basic256Sha256", "Aes128_Sha256_RsaOaep", "Aes256_Sha256_RsaPss"}}},
		{key: "mode", help: "None, Sign or SignAndEncrypt; left out: SignAndEncrypt, or None with security None", value: choice{&o.Mode, []string{"None", "Sign", "SignAndEncrypt"}}},
		{key: "user", help: "user name; anonymous when left out", value: textValue{&o.User}},
		{key: "password_file", path: secretPath, help: "file with the password", value: textValue{&o.PasswordFile}, secret: func(b []byte) { o.Password = string(b) }},
		{key: "cert_file", path: existing, help: "own certificate; made at the first start when left out", value: textValue{&o.CertFile}},
		{key: "key_file", path: secretPath, help: "own private key, with cert_file", value: textValue{&o.KeyFile}},
		{key: "server_cert_file", path: existing, help: "certificate of the server: only this one is trusted", value: textValue{&o.ServerCertFile}},
		{key: "ca_file", path: existing, help: "authorities that sign the server's certificate; instead of server_cert_file", value: textValue{&o.CAFile}},
		{key: "publish", def: "1s", help: "publishing interval of the subscriptions", value: durationValue{&o.Publish, 50 * time.Millisecond, time.Hour}},
		{key: "keep_alive_count", def: "10", help: "publishing intervals without a change until the server must say that it lives", value: intValue{&o.KeepAliveCount, 1, 10000}},
		{key: "allow_clear_password", def: "false", help: "send the password without encryption", value: boolValue{&o.AllowClearPassword}},
	}
}

func mqttSettings(m *MQTT) group {
	return group{
		{key: "broker", required: true, help: "write mqtts://HOST:8883, or mqtt://HOST:1883", value: textValue{&m.Broker}},
		{key: "client_id", help: "made from site and machine when left out; no two clients may share one", value: textValue{&m.ClientID}},
		{key: "user", help: "user name", value: textValue{&m.User}},
		{key: "password_file", path: secretPath, help: "file with the password", value: textValue{&m.PasswordFile}, secret: func(b []byte) { m.Password = string(b) }},
		{key: "ca_file", path: existing, help: "authorities that sign the broker's certificate; those of the system when left out", value: textValue{&m.CAFile}},
		{key: "cert_file", path: existing, help: "own certificate, PEM", value: textValue{&m.CertFile}},
		{key: "key_file", path: secretPath, help: "own private key, PEM", value: textValue{&m.KeyFile}},
		{key: "qos", def: "0", help: "0 or 1", value: qosValue{intValue{&m.QoS, 0, 1}}},
		{key: "payload", def: "plain", help: "plain (a number), json or sparkplug", value: choice{&m.Payload, []string{"plain", "json", "sparkplug"}}},
		{key: "value", help: "path of the value in the JSON, for tags without #path", value: textValue{&m.Value}},
		{key: "time", help: "path of the time in the JSON; time of arrival when left out", value: textValue{&m.Time}},
		{key: "quality", help: "path of the quality in the JSON; good when left out", value: textValue{&m.Quality}},
		{key: "time_zone", help: "zone of times without an offset, such as Europe/London; UTC when left out", value: nakedZone{textValue{&m.TimeZone}}},
		{key: "decimal_comma", def: "false", help: "numbers in payloads have a decimal comma", value: boolValue{&m.DecimalComma}},
		{key: "margin", def: "1s", help: "what has arrived counts as complete up to this long before", value: durationValue{&m.Margin, 0, time.Hour}},
		{key: "max_payload", def: "1048576", help: "bytes; longer payloads are not read, and counted", value: intValue{&m.MaxPayload, 1024, 64 << 20}},
		{key: "allow_clear_password", def: "false", help: "send the password without TLS", value: boolValue{&m.AllowClearPassword}},
	}
}

type qosValue struct{ intValue }

func (v qosValue) parse(s string) *mistake {
	if s == "2" {
		return wrong("write 0 or 1", "QoS 2 is refused: it makes the broker hold values back")
	}
	return v.intValue.parse(s)
}

// nakedZone is a time zone that is kept by name.
type nakedZone struct{ textValue }

func (v nakedZone) parse(s string) *mistake {
	var site Site
	if m := (zoneValue{&site}).parse(s); m != nil {
		return m
	}
	return v.textValue.parse(s)
}

// senderSettings are the keys of a sender.
func senderSettings(s *Sender) group {
	return group{
		{key: "name", required: true, help: "give the sender a name: letters, digits, _, - and ., at most 32", value: textValue{&s.Name}},
		{key: "mail", help: "an SMTP relay", present: func() bool { return s.Mail != nil }, open: func() group {
			if s.Mail == nil {
				s.Mail = &Mail{}
			}
			m := s.Mail
			return group{
				{key: "server", required: true, help: "write HOST:PORT of the relay, such as 10.1.0.9:25", value: textValue{&m.Server}},
				{key: "tls", def: "required", help: "required, allowed or never", value: choice{&m.TLS, []string{"required", "allowed", "never"}}},
				{key: "ca_file", path: existing, help: "authorities that sign the relay's certificate", value: textValue{&m.CAFile}},
				{key: "user", help: "user name; no login when left out", value: textValue{&m.User}},
				{key: "password_file", path: secretPath, help: "file with the password", value: textValue{&m.PasswordFile}, secret: func(b []byte) { m.Password = string(b) }},
				{key: "from", required: true, help: "write the sender's address", value: textValue{&m.From}},
				{key: "to", required: true, help: "write one or more addresses", value: listValue{&m.To, nil}},
				{key: "allow_clear_password", def: "false", help: "send the password without TLS", value: boolValue{&m.AllowClearPassword}},
			}
		}},
		{key: "webhook", help: "an HTTP endpoint that takes CloudEvents", present: func() bool { return s.Webhook != nil }, open: func() group {
			if s.Webhook == nil {
				s.Webhook = &Webhook{}
			}
			w := s.Webhook
			return group{
				{key: "url", required: true, help: "write https://HOST/PATH", value: textValue{&w.URL}},
				{key: "key_file", path: secretPath, help: "file with the key that signs the body", value: textValue{&w.KeyFile}, secret: func(b []byte) { w.Key = b }},
				{key: "ca_file", path: existing, help: "authorities that sign the server's certificate", value: textValue{&w.CAFile}},
				{key: "timeout", def: "10s", help: "for one attempt", value: durationValue{&w.Timeout, time.Second, 5 * time.Minute}},
			}
		}},
		{key: "mqtt", help: "an MQTT broker, on a connection of its own", present: func() bool { return s.MQTT != nil }, open: func() group {
			if s.MQTT == nil {
				s.MQTT = &MQTTSender{}
			}
			m := s.MQTT
			return group{
				{key: "broker", required: true, help: "write mqtts://HOST:8883, or mqtt://HOST:1883", value: textValue{&m.Broker}},
				{key: "client_id", help: "made from site and machine when left out", value: textValue{&m.ClientID}},
				{key: "user", help: "user name", value: textValue{&m.User}},
				{key: "password_file", path: secretPath, help: "file with the password", value: textValue{&m.PasswordFile}, secret: func(b []byte) { m.Password = string(b) }},
				{key: "ca_file", path: existing, help: "authorities that sign the broker's certificate", value: textValue{&m.CAFile}},
				{key: "cert_file", path: existing, help: "own certificate, PEM", value: textValue{&m.CertFile}},
				{key: "key_file", path: secretPath, help: "own private key, PEM", value: textValue{&m.KeyFile}},
				{key: "prefix", def: "midwatch", help: "topics are PREFIX/advisories/LOOP; outside every topic that a source reads", value: textValue{&m.Prefix}},
				{key: "allow_clear_password", def: "false", help: "send the password without TLS", value: boolValue{&m.AllowClearPassword}},
			}
		}},
		{key: "syslog", help: "an RFC 5424 receiver", present: func() bool { return s.Syslog != nil }, open: func() group {
			if s.Syslog == nil {
				s.Syslog = &Syslog{}
			}
			return group{
				{key: "address", required: true, help: "write udp://HOST:514, tcp://HOST:601 or tls://HOST:6514", value: textValue{&s.Syslog.Address}},
				{key: "ca_file", path: existing, help: "authorities that sign the receiver's certificate", value: textValue{&s.Syslog.CAFile}},
				{key: "facility", def: "local0", help: "daemon, user, local0 to local7", value: choice{&s.Syslog.Facility, []string{"daemon", "user", "local0", "local1", "local2", "local3", "local4", "local5", "local6", "local7"}}},
			}
		}},
		{key: "log", help: "one JSON line per advisory", present: func() bool { return s.Log != nil }, open: func() group {
			if s.Log == nil {
				s.Log = &LogSender{}
			}
			return group{
				{key: "path", def: "-", path: plainPath, help: "file; - is standard output", value: textValue{&s.Log.Path}},
			}
		}},
		{key: "command", help: "a local program that gets the advisory as JSON on standard input", present: func() bool { return s.Command != nil }, open: func() group {
			if s.Command == nil {
				s.Command = &Command{}
			}
			return group{
				{key: "path", required: true, path: plainPath, help: "name the program", value: textValue{&s.Command.Path}},
				{key: "args", help: "its arguments", value: listValue{&s.Command.Args, nil}},
				{key: "timeout", def: "30s", help: "until it is ended", value: durationValue{&s.Command.Timeout, time.Second, 10 * time.Minute}},
			}
		}},
	}
}
