// Package site is what all of the server's pages and calls share: the echo
// instance with its safety headers, one error handler, and tokens' keys.
package site

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"errors"
	"log/slog"
	"net/http"
	"net/url"
	"strings"
	"time"

	"github.com/labstack/echo/v4"
	"github.com/labstack/echo/v4/middleware"

	"distal/server/access"
	"distal/server/store"
)

// Problem is an error for people with a status of its own.
type Problem struct {
	Status  int
	Code    string
	Message string
}

func (p *Problem) Error() string { return p.Message }

// NewProblem makes a Problem.
func NewProblem(status int, code, message string) error { return &Problem{status, code, message} }

// ErrorPage renders an error for a browser that wants a page.
type ErrorPage func(c echo.Context, status int, message, reference string) error

// New makes the echo instance with headers, limits and the error handler.
func New(log *slog.Logger, page ErrorPage, secure bool) *echo.Echo {
	e := echo.New()
	e.HideBanner, e.HidePort = true, true
	e.Server.ReadHeaderTimeout = 10 * time.Second
	e.Server.ReadTimeout = 60 * time.Second
	e.Server.IdleTimeout = 120 * time.Second
	e.HTTPErrorHandler = errorHandler(log, page)
	e.Use(recoverPanics(log))
	e.Use(headers(secure))
	e.Use(middleware.BodyLimit("2M"))
	e.Use(sameOrigin)
	return e
}

func recoverPanics(log *slog.Logger) echo.MiddlewareFunc {
	return func(next echo.HandlerFunc) echo.HandlerFunc {
		return func(c echo.Context) (err error) {
			defer func() {
				if r := recover(); r != nil {
					log.Error("panic", "path", c.Path(), "panic", r)
					err = errors.New("internal error")
				}
			}()
			return next(c)
		}
	}
}

// headers isolates pages from other origins (finer clocks) and allows nothing
// that is not ours: no third party, no inline script.
func headers(secure bool) echo.MiddlewareFunc {
	policy := strings.Join([]string{
		"default-src 'none'", "script-src 'self' 'wasm-unsafe-eval'", "style-src 'self'", "img-src 'self' data: blob:",
		"connect-src 'self'", "font-src 'self'", "form-action 'self'", "base-uri 'none'", "frame-ancestors 'none'",
	}, "; ")
	return func(next echo.HandlerFunc) echo.HandlerFunc {
		return func(c echo.Context) error {
			h := c.Response().Header()
			h.Set("Content-Security-Policy", policy)
			h.Set("Cross-Origin-Opener-Policy", "same-origin")
			h.Set("Cross-Origin-Embedder-Policy", "require-corp")
			h.Set("Cross-Origin-Resource-Policy", "same-origin")
			h.Set("X-Content-Type-Options", "nosniff")
			h.Set("Referrer-Policy", "no-referrer")
			h.Set("Permissions-Policy", "camera=(), microphone=(), geolocation=(), fullscreen=(self)")
			h.Set("Cache-Control", "no-store")
			if secure {
				h.Set("Strict-Transport-Security", "max-age=31536000; includeSubDomains")
			}
			return next(c)
		}
	}
}

// sameOrigin refuses state changes that another site asks for. Browsers tell
// with Sec-Fetch-Site or Origin; other clients have no cookies to abuse.
func sameOrigin(next echo.HandlerFunc) echo.HandlerFunc {
	return func(c echo.Context) error {
		r := c.Request()
		switch r.Method {
		case http.MethodGet, http.MethodHead, http.MethodOptions:
			return next(c)
		}
		if site := r.Header.Get("Sec-Fetch-Site"); site != "" && site != "same-origin" && site != "none" {
			return NewProblem(http.StatusForbidden, "other_origin", "the request comes from another site")
		}
		if origin := r.Header.Get("Origin"); origin != "" && origin != "null" {
			if u, err := url.Parse(origin); err != nil || u.Host != r.Host {
				return NewProblem(http.StatusForbidden, "other_origin", "the request comes from another site")
			}
		}
		return next(c)
	}
}

// errorHandler turns errors into answers: expected ones with their sentence,
// others in the log in full and to the browser as one neutral sentence.
func errorHandler(log *slog.Logger, page ErrorPage) echo.HTTPErrorHandler {
	return func(err error, c echo.Context) {
		if c.Response().Committed {
			return
		}
		status, code, message := classify(err)
		reference := ""
		if status >= 500 {
			var b [4]byte
			rand.Read(b[:])
			reference = hex.EncodeToString(b[:])
			report := log.Error
			if errors.Is(err, context.Canceled) && c.Request().Context().Err() != nil {
				report = log.Info // the client has gone: nobody waits for the answer
			}
			report("request failed", "reference", reference, "method", c.Request().Method, "path", c.Path(), "error", err)
		}
		if c.Request().Method == http.MethodHead {
			_ = c.NoContent(status)
			return
		}
		if page != nil && strings.Contains(c.Request().Header.Get("Accept"), "text/html") {
			if page(c, status, message, reference) == nil {
				return
			}
		}
		_ = c.JSON(status, map[string]any{"error": map[string]string{"code": code, "message": message, "reference": reference}})
	}
}

func classify(err error) (status int, code, message string) {
	var problem *Problem
	var expected *store.Error
	var web *echo.HTTPError
	switch {
	case errors.As(err, &problem):
		return problem.Status, problem.Code, problem.Message
	case errors.As(err, &expected):
		status := map[store.Kind]int{store.Invalid: 422, store.NotFound: 404, store.Conflict: 409, store.Forbidden: 403}[expected.Kind]
		return status, expected.Code, expected.Message
	case errors.Is(err, access.ErrExpired):
		return http.StatusUnauthorized, "expired", "this link or session has expired"
	case errors.Is(err, access.ErrInvalid):
		return http.StatusUnauthorized, "token", "this link or session is not valid"
	case errors.Is(err, store.ErrBusy), errors.Is(err, context.Canceled), errors.Is(err, context.DeadlineExceeded):
		return http.StatusServiceUnavailable, "busy", "the server is busy: please try again"
	case errors.As(err, &web):
		text := http.StatusText(web.Code)
		if web.Code == http.StatusNotFound {
			text = "there is nothing at this address"
		}
		return web.Code, "http", text
	}
	return http.StatusInternalServerError, "internal", "something went wrong on our side"
}
