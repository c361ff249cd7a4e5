"""The content security policy of every page."""

from asgiref.sync import iscoroutinefunction, markcoroutinefunction

POLICY = (
    "default-src 'none'; script-src 'self'; style-src 'self'; img-src 'self' data: blob:; font-src 'self'; "
    "connect-src 'self'; manifest-src 'self'; worker-src 'self'; base-uri 'none'; form-action 'self'; "
    "frame-ancestors 'none'"
)


class ContentSecurityPolicy:
    """Adds the policy to each answer (Django 5.2 has no such middleware of its own)."""

    sync_capable = True
    async_capable = True

    def __init__(self, get_response):
        self.get_response = get_response
        if iscoroutinefunction(get_response):
            markcoroutinefunction(self)

    def __call__(self, request):
        if iscoroutinefunction(self.get_response):
            return self.answer_later(request)
        return self.with_policy(self.get_response(request))

    async def answer_later(self, request):
        return self.with_policy(await self.get_response(request))

    @staticmethod
    def with_policy(response):
        response.headers.setdefault("Content-Security-Policy", POLICY)
        return response
