% Responses and frequency-domain values from Octave's control package, an
% independent reference for the models:
%   octave --no-gui -q responses.m > octave.csv
% Input: held samples 1 s apart; every response is computed on a grid of 1/40 s
% with the dead time as whole fine steps, then every 40th sample is taken.
pkg load control
n = 60; fine = 40; h = 1/fine;
u = zeros(1, n);
u(4:20) = 1; u(21:30) = -0.5; u(31:60) = 0.8 + 0.3*sin((31:60)*0.7);
s = tf('s');
m = {"first",  tf(1.5, [7 1]),                3.3
     "second", tf(0.8, conv([9 1], [4 1])),   1.275
     "third",  tf(1, conv(conv([5 1],[3 1]),[1 1])), 0
     "integrating", tf(0.05, [1 0]),          2.6
     "integrating-lag", tf(0.04, [6 1 0]),    1.1};
uf = kron(u, ones(1, fine));
t = (0:length(uf)-1)*h;
printf("what,k,value\n");
for k = 1:n printf("input,%d,%.12g\n", k-1, u(k)); end
for i = 1:rows(m)
  d = round(m{i,3}/h);
  ud = [zeros(1, d) uf(1:end-d)];
  sysd = c2d(ss(m{i,2}), h, "zoh");
  y = lsim(sysd, ud', t);
  y = y(1:fine:end);
  for k = 1:n printf("%s,%d,%.12g\n", m{i,1}, k-1, y(k)); end
end
