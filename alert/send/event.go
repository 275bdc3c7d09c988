package send

import (
	"bytes"
	"encoding/json"
	"net/url"
	"time"

	"midwatch/alert"
	"midwatch/detect"
)

// cloudEvent is the envelope of CloudEvents 1.0 in structured JSON.
type cloudEvent struct {
	SpecVersion string          `json:"specversion"`
	ID          string          `json:"id"`
	Source      string          `json:"source"`
	Type        string          `json:"type"`
	Subject     string          `json:"subject,omitempty"`
	Time        string          `json:"time"`
	ContentType string          `json:"datacontenttype"`
	Data        json.RawMessage `json:"data"`
}

// extra is what the data hold besides the finding.
type extra struct {
	Episode  string           `json:"episode,omitempty"`
	State    alert.State      `json:"state,omitempty"`
	Urgency  alert.Urgency    `json:"urgency"`
	Count    int              `json:"count,omitempty"`
	OldNewsS float64          `json:"old_news_s,omitempty"` // age of the news when it was sent, s
	Title    string           `json:"title"`
	Short    string           `json:"short"` // at most 160 characters; of a message about several things too
	Body     string           `json:"body,omitempty"`
	Caution  string           `json:"caution"`
	Links    []alert.Link     `json:"links,omitempty"`
	Findings []detect.Finding `json:"advisories,omitempty"` // of a collected message
}

const eventMedia = "application/cloudevents+json; charset=utf-8"

// event is the message as other programs get it: the data are the finding, with
// the episode around it.
func event(m alert.Message) ([]byte, error) {
	x := extra{Episode: m.Episode, State: m.State, Urgency: m.Urgency, Count: m.Count, OldNewsS: m.Old.Round(time.Second).Seconds(),
		Title: m.Subject, Short: m.TextShort, Caution: alert.Caution, Links: m.Links, Findings: m.Items}
	if m.Finding == nil {
		x.Body = m.Text
	}
	data, err := json.Marshal(x)
	if err != nil {
		return nil, err
	}
	kind := "midwatch." + string(m.Type)
	if m.Type == alert.TypeAdvisory {
		kind = "midwatch.advisory." + string(m.Event)
	}
	if m.Finding != nil {
		f, err := json.Marshal(m.Finding)
		if err != nil {
			return nil, err
		}
		data = append(append(f[:len(f)-1:len(f)-1], ','), data[1:]...)
	}
	var b bytes.Buffer
	e := json.NewEncoder(&b)
	e.SetEscapeHTML(false)
	err = e.Encode(cloudEvent{SpecVersion: "1.0", ID: m.Key, Source: "/midwatch/" + url.PathEscape(m.Site), Type: kind, Subject: m.Loop,
		Time: m.Written.UTC().Format(time.RFC3339Nano), ContentType: "application/json", Data: data})
	return bytes.TrimRight(b.Bytes(), "\n"), err
}
