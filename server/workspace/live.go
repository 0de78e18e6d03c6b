package workspace

import (
	"context"
	"fmt"
	"net/http"
	"sync"
	"time"

	"github.com/google/uuid"
	"github.com/labstack/echo/v4"
)

// broadcaster passes news of studies on to open pages.
type broadcaster struct {
	mu        sync.Mutex
	listeners map[uuid.UUID]map[chan struct{}]bool
}

func (b *broadcaster) listen(study uuid.UUID) (news chan struct{}, leave func()) {
	news = make(chan struct{}, 1)
	b.mu.Lock()
	defer b.mu.Unlock()
	if b.listeners == nil {
		b.listeners = map[uuid.UUID]map[chan struct{}]bool{}
	}
	if b.listeners[study] == nil {
		b.listeners[study] = map[chan struct{}]bool{}
	}
	b.listeners[study][news] = true
	return news, func() {
		b.mu.Lock()
		defer b.mu.Unlock()
		delete(b.listeners[study], news)
	}
}

func (b *broadcaster) tell(study uuid.UUID) {
	b.mu.Lock()
	defer b.mu.Unlock()
	for news := range b.listeners[study] {
		select {
		case news <- struct{}{}:
		default: // the page has not looked at the last news yet
		}
	}
}

// Watch listens to the database until ctx ends, so that pages of every server
// process hear of what any of them stored.
func (s *Service) Watch(ctx context.Context) {
	for ctx.Err() == nil {
		err := s.Store.Listen(ctx, s.live.tell)
		if ctx.Err() != nil {
			return
		}
		s.Log.Warn("live updates are interrupted", "error", err)
		select {
		case <-time.After(2 * time.Second):
		case <-ctx.Done():
		}
	}
}

// liveEvents is a stream of server-sent events: one whenever the study has new
// data, at most one a second, and a comment now and then to keep it open.
func (s *Service) liveEvents(c echo.Context, w who) error {
	id, err := parameter(c)
	if err != nil {
		return err
	}
	if _, err := s.Store.FindStudy(c.Request().Context(), w.lab, id); err != nil {
		return err
	}
	news, leave := s.live.listen(id)
	defer leave()
	r := c.Response()
	r.Header().Set("Content-Type", "text/event-stream")
	r.WriteHeader(http.StatusOK)
	fmt.Fprint(r, ": listening\n\n")
	r.Flush()
	for {
		select {
		case <-news:
			fmt.Fprint(r, "data: changed\n\n")
		case <-time.After(20 * time.Second):
			fmt.Fprint(r, ": still here\n\n")
		case <-c.Request().Context().Done():
			return nil
		}
		r.Flush()
		select {
		case <-time.After(time.Second):
		case <-c.Request().Context().Done():
			return nil
		}
	}
}
