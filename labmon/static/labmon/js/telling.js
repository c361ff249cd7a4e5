// "Notify me on this device": asks the browser, subscribes at its push service, and gives the subscription to labmon.

const box = document.querySelector('[data-devices]');
const button = document.getElementById('notify-here');
const said = document.getElementById('device-said');

function bytesOf(text) {
  const padded = text.replace(/-/g, '+').replace(/_/g, '/').padEnd(Math.ceil(text.length / 4) * 4, '=');
  return Uint8Array.from(atob(padded), (letter) => letter.charCodeAt(0));
}

function textOf(buffer) {
  return btoa(String.fromCharCode(...new Uint8Array(buffer))).replace(/\+/g, '-').replace(/\//g, '_').replace(/=+$/, '');
}

function say(words) {
  said.textContent = words;
}

async function subscribe() {
  const worker = await navigator.serviceWorker.register(box.dataset.worker, { scope: '/' });
  await navigator.serviceWorker.ready;
  const held = await worker.pushManager.getSubscription();
  if (held && textOf(held.options.applicationServerKey ?? new ArrayBuffer(0)) !== box.dataset.key) await held.unsubscribe();
  return worker.pushManager.subscribe({ userVisibleOnly: true, applicationServerKey: bytesOf(box.dataset.key) });
}

async function give(subscription) {
  const body = new URLSearchParams({
    endpoint: subscription.endpoint,
    p256dh: textOf(subscription.getKey('p256dh')),
    auth: textOf(subscription.getKey('auth')),
    name: document.getElementById('device-name').value,
  });
  const token = box.querySelector('[name=csrfmiddlewaretoken]').value;
  const answer = await fetch(box.dataset.add, { method: 'POST', body, headers: { 'X-CSRFToken': token }, redirect: 'error' });
  if (!answer.ok) {
    const { why, do: remedy } = await answer.json();
    throw new Error(`${why} ${remedy}`);
  }
}

async function notifyHere() {
  button.disabled = true;
  try {
    if (await Notification.requestPermission() !== 'granted') {
      say('This browser does not allow notifications of labmon. Allow them in its site settings, then try again.');
      return;
    }
    await give(await subscribe());
    location.reload();
  } catch (fault) {
    say(`Not done. ${fault.message || fault}`);
  } finally {
    button.disabled = false;
  }
}

if (!window.isSecureContext) {
  say('Browsers notify only from an address with https. Ask whoever runs this lab for it; until then you are told by mail.');
} else if (!('serviceWorker' in navigator) || !('PushManager' in window) || !('Notification' in window)) {
  say('This browser cannot be notified. On a phone, add labmon to the home screen first, or use another browser.');
} else {
  said.textContent = '';
  button.disabled = false;
  button.addEventListener('click', notifyHere);
}
