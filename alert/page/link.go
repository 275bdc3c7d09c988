package page

import (
	"cmp"
	"errors"
	"net/http"
	"strings"
	"time"

	"midwatch/alert"
)

// linkPath is where links in mails lead: whoever has one needs no token.
const linkPath = "/acknowledge/"

// spare keeps links out of the log: they are good for something.
func spare(path string) string {
	if strings.HasPrefix(path, linkPath) {
		return linkPath
	}
	return path
}

type linkView struct {
	shell
	Subject, Text, Since, AckBy, Problem string
	State                                alert.State
	WhoWant, Done                        bool
}

// serveLink asks whether to acknowledge. It changes nothing: programs that look
// into mails open links, too.
func (p *Page) serveLink(w http.ResponseWriter, r *http.Request) { p.showLink(w, r, http.StatusOK, "") }

func (p *Page) showLink(w http.ResponseWriter, r *http.Request, code int, problem string) {
	e, err := p.o.House.Linked(r.PathValue("token"))
	if err != nil {
		p.linkRefused(w, r, err)
		return
	}
	p.showAs(w, r, code, "link", p.linkView(r, &e, problem))
}

func (p *Page) linkView(r *http.Request, e *alert.Episode, problem string) linkView {
	f := e.Lead()
	v := linkView{shell: p.shell(r, up(r), nil), Subject: cmp.Or(e.Subject.Loop, e.Subject.Source, e.Subject.Part), Text: f.Text,
		Since: time.UnixMilli(e.Since).In(p.o.House.Site().Zone).Format("Mon 2 Jan 15:04 MST"), State: e.State(), Problem: problem}
	v.WhoWant = v.Visitor.Name == ""
	if e.Ack != nil {
		v.AckBy = e.Ack.Who
	}
	return v
}

func (p *Page) acknowledgeByLink(w http.ResponseWriter, r *http.Request) {
	token := r.PathValue("token")
	e, err := p.o.House.Linked(token)
	if err != nil {
		p.linkRefused(w, r, err)
		return
	}
	name, err := who(r)
	if err != nil {
		if _, bad := errors.AsType[badRequest](err); bad {
			p.showLink(w, r, http.StatusBadRequest, "Say who you are: your name goes into the journal.")
			return
		}
		p.answer(w, r, err)
		return
	}
	if err := p.o.House.AcknowledgeByLink(token, name, r.PostFormValue("why")); err != nil {
		p.linkRefused(w, r, err)
		return
	}
	p.audit(r, "acknowledged by link", name, "episode", e.ID)
	v := p.linkView(r, &e, "")
	v.Done = true
	p.show(w, r, "link", v)
}

func (p *Page) linkRefused(w http.ResponseWriter, r *http.Request, err error) {
	if !errors.Is(err, alert.ErrLink) {
		p.refused(w, r, err)
		return
	}
	p.o.Log.Warn("link refused", "audit", true, "from", remote(r))
	what, hint, _ := strings.Cut(err.Error(), "; hint: ")
	p.refuse(w, r, http.StatusForbidden, what, hint)
}
