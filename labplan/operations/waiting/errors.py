"""What this service has to say itself; all other refusals are the web service's."""

from labplan.base.errors import DomainError


class WebAway(DomainError):
    code = "web_service_away"
    title = "The web service is not there"
    status = 503


class WebBrokeOff(DomainError):
    code = "web_service_broke_off"
    title = "The web service broke off"
    status = 502


class WebSilent(DomainError):
    code = "web_service_silent"
    title = "The web service does not answer"
    status = 504


class ClientSlow(DomainError):
    code = "request_too_slow"
    title = "The request did not arrive in time"
    status = 408


class MethodUnknown(DomainError):
    code = "method_unknown"
    title = "This method is not known here"
    status = 501


class BrokenHere(DomainError):
    code = "internal_error"
    title = "Something broke"
    status = 500
