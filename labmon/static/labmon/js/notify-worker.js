// Shows what was pushed, and opens its page. Served from the root, so that it may open any page of our own.

self.addEventListener('push', (event) => {
  let said = { title: 'labmon', text: 'Something needs you.', path: '/alarms/', tag: 'labmon' };
  try {
    said = { ...said, ...event.data.json() };
  } catch {
    // Nothing readable came: better to say something than nothing.
  }
  event.waitUntil(self.registration.showNotification(said.title, {
    body: said.text, tag: said.tag, data: { path: said.path }, requireInteraction: true,
  }));
});

self.addEventListener('notificationclick', (event) => {
  event.notification.close();
  const path = event.notification.data?.path ?? '/alarms/';
  const address = new URL(path.startsWith('/') ? path : '/alarms/', self.location.origin).href;
  event.waitUntil((async () => {
    const pages = await self.clients.matchAll({ type: 'window', includeUncontrolled: true });
    const open = pages.find((page) => page.url === address);
    return open ? open.focus() : self.clients.openWindow(address);
  })());
});
