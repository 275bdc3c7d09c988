package alert

import (
	"crypto/hmac"
	"crypto/rand"
	"crypto/sha256"
	"encoding/base64"
	"encoding/binary"
	"errors"
	"fmt"
	"strings"
	"time"

	"midwatch/detect"
)

// ErrLink is returned for a link that acknowledges nothing (any more). What
// follows it says why, in a sentence for who opened it.
var ErrLink = errors.New("this link cannot be used")

// link is what a link in a mail stands for: to acknowledge one coming of one
// episode, once.
type link struct {
	expires int64 // wall time, s
	step    uint32
	count   uint32 // of the episode when the mail was made
	episode string
	sender  string
}

const (
	linkHead = 1 + 8 + 4 + 4 + 1 // version, expires, step, count, length of the episode's id
	linkMost = 400               // bytes of a token
)

var linkCode = base64.RawURLEncoding.Strict()

// token writes the link down, signed.
func (l link) token(key []byte, site string) string {
	b := []byte{1}
	b = binary.BigEndian.AppendUint64(b, uint64(l.expires))
	b = binary.BigEndian.AppendUint32(b, l.step)
	b = binary.BigEndian.AppendUint32(b, l.count)
	b = append(append(b, byte(len(l.episode))), l.episode...)
	b = append(b, l.sender...)
	return linkCode.EncodeToString(append(b, linkSum(key, site, b)...))
}

func linkSum(key []byte, site string, b []byte) []byte {
	h := hmac.New(sha256.New, key)
	fmt.Fprintf(h, "midwatch acknowledge\x00%s\x00", site)
	h.Write(b)
	return h.Sum(nil)
}

// readLink takes what token made with the same key, and nothing else.
func readLink(s string, key []byte, site string) (l link, ok bool) {
	if len(key) == 0 || len(s) > linkMost {
		return l, false
	}
	b, err := linkCode.DecodeString(s)
	if err != nil || len(b) < linkHead+sha256.Size {
		return l, false
	}
	b, sum := b[:len(b)-sha256.Size], b[len(b)-sha256.Size:]
	if !hmac.Equal(sum, linkSum(key, site, b)) || b[0] != 1 || len(b) < linkHead+int(b[linkHead-1]) {
		return l, false
	}
	n := linkHead + int(b[linkHead-1])
	return link{int64(binary.BigEndian.Uint64(b[1:])), binary.BigEndian.Uint32(b[9:]), binary.BigEndian.Uint32(b[13:]), string(b[linkHead:n]), string(b[n:])}, true
}

// makeLinkKey makes the key of all links when they are first wanted.
func (d *Desk) makeLinkKey(time.Time) error {
	if d.set.Advise.Links <= 0 || len(d.mem.linkKey) > 0 {
		return nil
	}
	key := make([]byte, sha256.Size)
	_, _ = rand.Read(key) // never fails
	return d.update(func(b *batch) error {
		d.mem.linkKey = key
		return put(b.tx, bucketMeta, []byte("link-key"), key)
	})
}

// acknowledgeLink is the link for a mail about an item; false where none belongs.
func (d *Desk) acknowledgeLink(x *delivery, it *Item, now time.Time) (Link, bool) {
	keep := d.set.Advise.Links
	expires := time.UnixMilli(x.Written).Add(keep)
	if keep <= 0 || d.set.PageURL == "" || len(d.mem.linkKey) == 0 || !d.set.mail[x.Sender] || it.State == Folded ||
		it.Event == detect.Cleared || !expires.After(now) || len(it.Episode) > 255 {
		return Link{}, false
	}
	l := link{expires.Unix(), it.Step, uint32(it.Count), it.Episode, x.Sender}
	return Link{"acknowledge, until " + short(expires.UnixMilli(), d.set.Zone), strings.TrimRight(d.set.PageURL, "/") + "/acknowledge/" + l.token(d.mem.linkKey, d.set.Site)}, true
}

// Linked gives the episode that a link would acknowledge, and changes nothing:
// programs that look into mails open links, too.
func (d *Desk) Linked(token string) (Episode, error) {
	d.mu.Lock()
	defer d.mu.Unlock()
	if !d.loaded {
		if err := d.load(); err != nil {
			return Episode{}, err
		}
	}
	var e Episode
	err := d.o.Store.View(func(tx Tx) error {
		x, _, err := (&batch{d: d, tx: tx}).linked(token)
		if x != nil {
			e = x.clone()
		}
		return err
	})
	if r, ok := errors.AsType[refusal](err); ok {
		err = r.error
	}
	return e, err
}

// AcknowledgeByLink acknowledges the episode of a link, and uses the link up.
func (d *Desk) AcknowledgeByLink(token, who, why string) error {
	if err := signed(who, why); err != nil {
		return err
	}
	d.mu.Lock()
	defer d.mu.Unlock()
	return d.update(func(b *batch) error {
		e, l, err := b.linked(token)
		if err != nil {
			return err
		}
		how := "by the link in the message to " + l.sender
		if why = clean(why); why != "" {
			how = why + " (" + how + ")"
		}
		if err := b.acknowledge(e, clean(who), how, time.Time{}); err != nil {
			return err
		}
		return put(b.tx, bucketLinks, key3(l.episode, l.step, l.sender), b.d.wall())
	})
}

// linked finds what a link is about, or says why it is refused.
func (b *batch) linked(token string) (*Episode, link, error) {
	d := b.d
	no := func(format string, a ...any) (*Episode, link, error) {
		return nil, link{}, refusal{fmt.Errorf("%w: "+format, append([]any{ErrLink}, a...)...)}
	}
	if d.set.Advise.Links <= 0 {
		return no("links in messages are switched off here; hint: acknowledge on the page")
	}
	l, ok := readLink(token, d.mem.linkKey, d.set.Site)
	if !ok {
		return no("it was not made here, or is not whole; hint: copy all of it from the message, or acknowledge on the page")
	}
	if d.o.Clock().Unix() >= l.expires {
		return no("its time was over at %s; hint: acknowledge on the page", stamp(l.expires*1000, d.set.Zone))
	}
	var used int64
	if had, err := get(b.tx, bucketLinks, key3(l.episode, l.step, l.sender), &used); err != nil {
		return nil, l, err
	} else if had {
		return no("it was used at %s, and is good for once; hint: the page shows by whom", stamp(used, d.set.Zone))
	}
	e, err := b.episode(l.episode)
	switch {
	case err != nil:
		return nil, l, err
	case e == nil:
		return no("its episode is not kept any more; hint: there is nothing to do")
	case e.Into != "":
		return no("its episode went on in a wider one; hint: acknowledge that one on the page")
	case uint32(e.Count) != l.count:
		return no("the trouble was over and came back since the message; hint: use the link in a newer message, or the page")
	}
	return e, l, nil
}
