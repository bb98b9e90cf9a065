package main

import (
	"net/url"

	"saprolite/alerts"
	"saprolite/alerts/mail"
	"saprolite/alerts/webhook"
	"saprolite/config"
	"saprolite/detectors/finding"
)

// couriers makes one courier for each destination.
func (d *daemon) couriers() ([]*alerts.Courier, error) {
	var out []*alerts.Courier
	for _, c := range d.cfg.Destinations {
		dest, schedule, err := destination(d.cfg, c)
		if err != nil {
			return nil, exitWith(exitConfiguration, err)
		}
		courier, err := alerts.NewCourier(dest, told{d.broker}, d.keeper.books, alerts.CourierOptions{
			Filter: filter(c), Schedule: schedule, OnEvent: d.onDelivery,
		})
		if err != nil {
			return nil, exitWith(exitConfiguration, err)
		}
		out = append(out, courier)
	}
	return out, nil
}

func destination(cfg *config.Config, c config.Destination) (alerts.Destination, alerts.Schedule, error) {
	if m := c.Mail; m != nil {
		tls := mail.StartTLS
		if m.Plain {
			tls = mail.NoTLS
		}
		dest, err := mail.New(mail.Options{
			Name: c.Name, Server: m.Server, From: m.From, To: m.To,
			Username: m.Username, Password: m.Password.Reveal(), TLS: tls, Place: cfg.Place,
		})
		return dest, alerts.MailSchedule(), err
	}
	dest, err := webhook.New(webhook.Options{
		Name: c.Name, URL: c.Webhook.URL, Secret: c.Webhook.Secret.Reveal(), Source: "/saprolite/" + url.PathEscape(cfg.Place),
		AllowPrivate: c.Webhook.AllowPrivate,
	})
	return dest, alerts.WebhookSchedule(), err
}

func filter(c config.Destination) alerts.Filter {
	f := alerts.Filter{Groups: c.Groups}
	for _, k := range c.Kinds {
		f.Kinds = append(f.Kinds, finding.Kind(k))
	}
	for _, l := range c.Levels {
		f.Levels = append(f.Levels, finding.Level(l))
	}
	return f
}

// onDelivery logs what a courier reports. It is called from its goroutine.
func (d *daemon) onDelivery(e alerts.Event) {
	log := d.log.Info()
	if e.Err != nil {
		log = d.log.Warn().Err(e.Err)
	}
	log.Str("destination", e.Destination).Str("id", e.MessageID).Int("attempt", e.Attempt).Msg(string(e.Kind))
}
