// Package configs reads the configuration (strict YAML) and the loop list (CSV)
// into plain structs. It reports every mistake of a file in one go, each with
// file, line, column, key, what is wrong and what would be right.
package configs

import "time"

// Config is the configuration in force, defaults filled in.
type Config struct {
	File      string
	Site      Site
	Data      string // data folder
	Keep      Keep
	Page      Page
	Sources   []Source
	LoopList  string
	Loops     []*Loop // of loop_list and of loops, in that order
	Detect    Detect
	Advise    Advise
	Heartbeat Heartbeat
	Warnings  []string // what is allowed but worth saying

	given map[string]Position // keys that stand in the file, by path
}

// Site is where the box stands.
type Site struct {
	Name     string
	TimeZone string
	Zone     *time.Location
}

// Keep says how long and how much is kept.
type Keep struct {
	Full, Thin, Evidence time.Duration
	Episodes             time.Duration // how long ended episodes and their journals are kept
	Names                time.Duration // how long names of people are kept in journals; 0 = as long as the journal
	Size                 int64         // bytes of trend files
	Flush                time.Duration // trend flush interval
}

// Page is the page and its HTTP interface.
type Page struct {
	Listen            string
	CertFile, KeyFile string
	TokensFile        string
	URL               string // how people reach the page, for links
	Prefix            string // path prefix behind a proxy
	Shifts            []int  // when shifts begin, minutes of the day, site time, ascending
}

// Source is one source of tags; exactly one of OPCUA and MQTT is set.
type Source struct {
	Name  string
	OPCUA *OPCUA
	MQTT  *MQTT
	Where Position
}

// OPCUA is an OPC UA server.
type OPCUA struct {
	Endpoint           string
	Security           string // None, Basic256Sha256, Aes128_Sha256_RsaOaep, Aes256_Sha256_RsaPss
	Mode               string // None, Sign, SignAndEncrypt
	User               string
	PasswordFile       string
	Password           string // read from PasswordFile, never from the file itself
	CertFile, KeyFile  string // own; made at first start when empty
	ServerCertFile     string // pinned
	CAFile             string // trusted authorities instead of a pin
	Publish            time.Duration
	AllowClearPassword bool
	KeepAliveCount     int
}

// MQTT is an MQTT 3.1.1 broker.
type MQTT struct {
	Broker               string
	ClientID             string
	User                 string
	PasswordFile         string
	Password             string // read from PasswordFile
	CAFile               string
	CertFile, KeyFile    string
	QoS                  int
	Payload              string // plain, json, sparkplug
	Value, Time, Quality string // paths in the JSON
	TimeZone             string // of naive local times
	DecimalComma         bool
	Margin               time.Duration // for ticks: arrival less this is taken as delivered
	MaxPayload           int           // bytes; longer payloads are cut and counted
	AllowClearPassword   bool
}

// Detect holds what little there is to set for detection.
type Detect struct {
	NuisancePerLoopYear float64
	Standing            time.Duration // findings before this age of the watch are standing
}

// Advise says who is told, how and when.
type Advise struct {
	Senders  []Sender
	Routes   []Route
	Working  []Hours
	Night    int // pages per person and night
	Day      int // items per person and day
	Digest   Digest
	Escalate []Escalate
	Links    time.Duration // how long a link in a mail acknowledges; 0 = no such links
}

// Sender is one way out; exactly one of the kinds is set.
type Sender struct {
	Name    string
	Mail    *Mail
	Webhook *Webhook
	MQTT    *MQTTSender
	Syslog  *Syslog
	Log     *LogSender
	Command *Command
	Where   Position
}

// Mail is an SMTP relay.
type Mail struct {
	Server       string // host:port
	TLS          string // required, allowed, never
	CAFile       string
	User         string
	PasswordFile string
	Password     string
	From         string
	To           []string

	AllowClearPassword bool
}

// Webhook is an HTTP endpoint that takes CloudEvents.
type Webhook struct {
	URL     string
	KeyFile string
	Key     []byte // read from KeyFile
	CAFile  string
	Timeout time.Duration
}

// MQTTSender publishes advisories on a connection of its own.
type MQTTSender struct {
	Broker            string
	ClientID          string
	User              string
	PasswordFile      string
	Password          string
	CAFile            string
	CertFile, KeyFile string
	Prefix            string

	AllowClearPassword bool
}

// Syslog is an RFC 5424 receiver: udp://, tcp:// or tls:// host:port.
type Syslog struct {
	Address  string
	CAFile   string
	Facility string
}

// LogSender writes one JSON line per advisory to a file, or to standard output
// when Path is "-".
type LogSender struct {
	Path string
}

// Command runs a local program with the advisory as JSON on standard input.
type Command struct {
	Path    string
	Args    []string
	Timeout time.Duration
}

// Route sends what matches to a sender. Empty fields match everything.
type Route struct {
	To       []string
	Areas    []string
	Services []string
	Loops    []string // patterns with * and ?
	Kinds    []string // words of Kinds
	Urgency  []string // words of Urgencies
	Hours    []Hours
	Person   string
	Where    Position
}

// Hours is a span of the week in the site's zone: "mon-fri 07:00-16:00".
type Hours struct {
	Text     string
	Days     [7]bool // Sunday first
	From, To int     // minutes of the day; To <= From goes over midnight
}

// Digest says when digests go out, site time.
type Digest struct {
	Daily  string // "07:00", empty = none
	Weekly string // "mon 07:00", empty = none
	To     []string
}

// Escalate tells somebody else when nobody acknowledged.
type Escalate struct {
	After time.Duration
	To    []string
}

// Heartbeat tells another program that the watch is well.
type Heartbeat struct {
	URL   string
	File  string
	Topic string // on the sender MQTT
	MQTT  string // name of the MQTT sender
	Every time.Duration
}
